#include "ops/linear/linear.h"

#include <array>

namespace leadsman::ops {
namespace {

class Linear final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "linear",
        .meaning = "affine map of the channels of each position",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {},
        .weights = {{"weight", true, "[O, C]"}, {"bias", false, "[O]"}},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {2, 3, 4});
    const Shape& weight = context.weight("weight")->shape();
    require_rank("weight", weight, {2});
    require_shape("weight", weight, {weight[0], channel_count(input)});
    if (const Tensor* bias = context.weight("bias")) {
      require_shape("bias", bias->shape(), {weight[0]});
    }
    return input.with(channel_axis(input), weight[0]);
  }

  Cost cost(const OpContext& context) const override {
    const std::int64_t reduction = channel_count(context.inputs[0]);
    return {.macs = context.output.elements() * reduction, .reduction = reduction};
  }

  std::span<const Strategy* const> strategies() const override {
    static const std::array<const Strategy*, 2> all{&linear_matrix(), &linear_reference()};
    return all;
  }

  bool takes_epilogue() const override { return true; }
};

}  // namespace

const Operator& linear_operator() {
  static const Linear instance;
  return instance;
}

}  // namespace leadsman::ops
