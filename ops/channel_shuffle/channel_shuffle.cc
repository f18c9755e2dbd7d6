#include "ops/channel_shuffle/channel_shuffle.h"

#include "leadsman/error.h"
#include "ops/rows.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : rows_(position_count(context.output)),
        groups_(context.attributes.integer("groups")),
        in_group_(context.output[1] / groups_) {}

  void run(const KernelCall& call) const override {
    const std::int64_t channels = groups_ * in_group_;
    parallel_rows(call.threads, rows_, channels, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t row = begin; row < end; ++row) {
        const float* x = call.inputs[0].data + row * channels;
        float* y = call.output.data + row * channels;
        for (std::int64_t i = 0; i < groups_; ++i) {
          for (std::int64_t j = 0; j < in_group_; ++j) y[j * groups_ + i] = x[i * in_group_ + j];
        }
      }
    });
  }

 private:
  std::int64_t rows_, groups_, in_group_;
};

class ChannelShuffle final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "channel_shuffle",
        .meaning = "channels of groups interleaved (Zhang et al. 2018)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {{.name = "groups",
                        .type = AttributeType::kInteger,
                        .fallback = {},
                        .meaning = "how many groups of neighbouring channels there are",
                        .minimum = 1,
                        .maximum = 1 << 20,
                        .choices = {}}},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {4});
    const std::int64_t groups = context.attributes.integer("groups");
    if (input[1] % groups != 0) {
      throw_input("groups is " + std::to_string(groups) + ", which does not divide " +
                  std::to_string(input[1]) + " channels");
    }
    return input;
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& channel_shuffle_operator() {
  static const ChannelShuffle instance;
  return instance;
}

}  // namespace leadsman::ops
