#include "ops/select/select.h"

#include <algorithm>

#include "leadsman/error.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : index_(context.attributes.integer("index")), input_(context.inputs[0]) {}

  void run(const KernelCall& call) const override {
    for (std::int64_t n = 0; n < input_[0]; ++n) {
      std::copy_n(call.inputs[0].data + (n * input_[1] + index_) * input_[2], input_[2],
                  call.output.data + n * input_[2]);
    }
  }

 private:
  std::int64_t index_;
  Shape input_;
};

class Select final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "select",
        .meaning = "one token of each item",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {{.name = "index",
                        .type = AttributeType::kInteger,
                        .fallback = {},
                        .meaning = "which token, counted from 0",
                        .minimum = 0,
                        .choices = {}}},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {3});
    const std::int64_t index = context.attributes.integer("index");
    if (index >= input[1]) {
      throw_input("index is " + std::to_string(index) + ", but input of shape " +
                  input.to_string() + " has " + std::to_string(input[1]) + " tokens");
    }
    return {input[0], input[2]};
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& select_operator() {
  static const Select instance;
  return instance;
}

}  // namespace leadsman::ops
