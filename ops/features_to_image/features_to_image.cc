#include "ops/features_to_image/features_to_image.h"

#include "ops/copy_kernel.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class FeaturesToImage final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "features_to_image",
        .meaning = "features as an image of one position",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {2});
    return {input[0], input[1], 1, 1};
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<CopyKernel>();
  }

  bool is_view(const OpContext& /*context*/) const override { return true; }
};

}  // namespace

const Operator& features_to_image_operator() {
  static const FeaturesToImage instance;
  return instance;
}

}  // namespace leadsman::ops
