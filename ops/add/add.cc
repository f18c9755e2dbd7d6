#include "ops/add/add.h"

#include <array>

namespace leadsman::ops {
namespace {

class Add final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "add",
        .meaning =
            "sum of two tensors of one shape, as in a residual connection "
            "(He et al. 2016)",
        .min_inputs = 2,
        .max_inputs = 2,
        .attributes = {},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    require_shape("input 2", context.inputs[1], context.inputs[0]);
    return context.inputs[0];
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    static const std::array<const Strategy*, 2> all{&add_rows(), &add_reference()};
    return all;
  }

  bool takes_epilogue() const override { return true; }
};

}  // namespace

const Operator& add_operator() {
  static const Add instance;
  return instance;
}

}  // namespace leadsman::ops
