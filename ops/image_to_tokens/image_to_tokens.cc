#include "ops/image_to_tokens/image_to_tokens.h"

#include "ops/copy_kernel.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class ImageToTokens final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "image_to_tokens",
        .meaning = "the positions of an image, row by row, as tokens (Dosovitskiy et al. 2021)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {4});
    return {input[0], Shape{input[2], input[3]}.elements(), input[1]};
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<CopyKernel>();
  }

  bool is_view(const OpContext& /*context*/) const override { return true; }
};

}  // namespace

const Operator& image_to_tokens_operator() {
  static const ImageToTokens instance;
  return instance;
}

}  // namespace leadsman::ops
