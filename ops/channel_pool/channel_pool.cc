#include "ops/channel_pool/channel_pool.h"

#include <cmath>

#include "leadsman/error.h"
#include "ops/rows.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

float mean_of(const float* x, std::int64_t count) {
  double sum = 0.0;
  for (std::int64_t c = 0; c < count; ++c) sum += static_cast<double>(x[c]);
  return static_cast<float>(sum / static_cast<double>(count));
}

// NaN where one is: a comparison alone would lose it.
float largest_of(const float* x, std::int64_t count) {
  float largest = x[0];
  for (std::int64_t c = 1; c < count; ++c) {
    if (x[c] > largest || std::isnan(x[c])) largest = x[c];
  }
  return largest;
}

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : rows_(position_count(context.inputs[0])),
        channels_(channel_count(context.inputs[0])),
        pool_(context.attributes.text("kind") == "mean" ? mean_of : largest_of) {}

  void run(const KernelCall& call) const override {
    parallel_rows(call.threads, rows_, channels_, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t row = begin; row < end; ++row) {
        call.output.data[row] = pool_(call.inputs[0].data + row * channels_, channels_);
      }
    });
  }

 private:
  std::int64_t rows_, channels_;
  float (*pool_)(const float*, std::int64_t);
};

class ChannelPool final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "channel_pool",
        .meaning = "the mean or the largest of each position's channels (Woo et al. 2018)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {{.name = "kind",
                        .type = AttributeType::kText,
                        .fallback = {},
                        .meaning = "what is kept of the channels",
                        .choices = {"mean", "max"}}},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {3, 4});
    if (channel_count(input) < 1) {
      throw_input("input has shape " + input.to_string() + ", which has no channels");
    }
    return input.with(channel_axis(input), 1);
  }

  Cost cost(const OpContext& context) const override {
    const bool sums = context.attributes.text("kind") == "mean";
    return {.macs = 0, .reduction = sums ? channel_count(context.inputs[0]) : 1};
  }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& channel_pool_operator() {
  static const ChannelPool instance;
  return instance;
}

}  // namespace leadsman::ops
