#include "ops/tokens_to_image/tokens_to_image.h"

#include "ops/copy_kernel.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class TokensToImage final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "tokens_to_image",
        .meaning = "tokens as the positions of an image, row by row (Wang et al. 2021)",
        .min_inputs = 2,
        .max_inputs = 2,
        .attributes = {},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& tokens = context.inputs[0];
    const Shape& grid = context.inputs[1];
    require_rank("input 1", tokens, {3});
    require_rank("input 2", grid, {4});
    require_shape("input 1", tokens,
                  {grid[0], Shape{grid[2], grid[3]}.elements(), channel_count(tokens)});
    return {tokens[0], tokens[2], grid[2], grid[3]};
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<CopyKernel>();
  }

  bool is_view(const OpContext& /*context*/) const override { return true; }
};

}  // namespace

const Operator& tokens_to_image_operator() {
  static const TokensToImage instance;
  return instance;
}

}  // namespace leadsman::ops
