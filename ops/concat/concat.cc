#include "ops/concat/concat.h"

#include <cstring>

#include "ops/rows.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

constexpr int kMostInputs = 65536;

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : rows_(position_count(context.output)), channels_(channel_count(context.output)) {
    for (const Shape& input : context.inputs) widths_.push_back(channel_count(input));
  }

  void run(const KernelCall& call) const override {
    parallel_rows(call.threads, rows_, channels_, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t row = begin; row < end; ++row) {
        float* to = call.output.data + row * channels_;
        for (std::size_t i = 0; i < widths_.size(); ++i) {
          std::memcpy(to, call.inputs[i].data + row * widths_[i],
                      static_cast<std::size_t>(widths_[i]) * sizeof(float));
          to += widths_[i];
        }
      }
    });
  }

 private:
  std::int64_t rows_;
  std::int64_t channels_;
  std::vector<std::int64_t> widths_;
};

class Concat final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "concat",
        .meaning = "the inputs' channels one after the other (Huang et al. 2017)",
        .min_inputs = 2,
        .max_inputs = kMostInputs,
        .attributes = {},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& first = context.inputs[0];
    require_rank("input 1", first, {2, 3, 4});
    const int axis = channel_axis(first);
    std::int64_t channels = channel_count(first);
    for (std::size_t i = 1; i < context.inputs.size(); ++i) {
      const Shape& input = context.inputs[i];
      const std::string what = "input " + std::to_string(i + 1);
      require_rank(what, input, {first.rank()});
      require_shape(what, input, first.with(axis, channel_count(input)));
      channels += channel_count(input);  // at most 2^16 inputs of 2^40: fits
    }
    return first.with(axis, channels);
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& concat_operator() {
  static const Concat instance;
  return instance;
}

}  // namespace leadsman::ops
