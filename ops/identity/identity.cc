#include "ops/identity/identity.h"

#include "ops/copy_kernel.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class Identity final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "identity",
        .meaning = "its input: dropout and the like at inference",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override { return context.inputs[0]; }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<CopyKernel>();
  }

  bool is_view(const OpContext& /*context*/) const override { return true; }
};

}  // namespace

const Operator& identity_operator() {
  static const Identity instance;
  return instance;
}

}  // namespace leadsman::ops
