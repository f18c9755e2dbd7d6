#include "ops/class_token/class_token.h"

#include <algorithm>

#include "core/threads.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : item_(context.inputs[0][1] * context.inputs[0][2]),
        items_(context.inputs[0][0]),
        tokens_(*context.weight("weight")) {}

  void run(const KernelCall& call) const override {
    parallel_for(call.threads, items_, [&](std::int64_t n, int) {
      float* to = call.output.data + n * (tokens_.elements() + item_);
      to = std::copy_n(tokens_.data(), tokens_.elements(), to);
      std::copy_n(call.inputs[0].data + n * item_, item_, to);
    });
  }

 private:
  std::int64_t item_;
  std::int64_t items_;
  Tensor tokens_;
};

class ClassToken final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "class_token",
        .meaning = "learned tokens put before the others (Dosovitskiy et al. 2021)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {},
        .weights = {{"weight", true, "[1, K, C], the K tokens"}},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {3});
    const Shape& weight = context.weight("weight")->shape();
    require_rank("weight", weight, {3});
    require_shape("weight", weight, {1, weight[1], input[2]});
    return input.with(1, weight[1] + input[1]);
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& class_token_operator() {
  static const ClassToken instance;
  return instance;
}

}  // namespace leadsman::ops
