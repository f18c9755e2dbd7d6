#include "ops/flatten/flatten.h"

#include "core/threads.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

// Whether memory order (channels innermost) is logical order already.
bool same_bytes(const Shape& input) {
  return input.rank() != 4 || input[1] == 1 || input[2] * input[3] == 1;
}

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context) : input_(context.inputs[0]) {}

  bool runs_in_place() const override { return same_bytes(input_); }

  void run(const KernelCall& call) const override {
    if (call.output.data == call.inputs[0].data) return;
    copy_to_logical({call.inputs[0].data, input_}, call.output.data);
  }

 private:
  Shape input_;
};

class Flatten final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "flatten",
        .meaning = "all of one item's values in a row, in logical order",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {2, 3, 4});
    return {input[0], Shape(input.sizes().subspan(1)).elements()};
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }

  bool is_view(const OpContext& context) const override { return same_bytes(context.inputs[0]); }
};

}  // namespace

const Operator& flatten_operator() {
  static const Flatten instance;
  return instance;
}

}  // namespace leadsman::ops
