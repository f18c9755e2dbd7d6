#include "ops/activation/activation.h"

#include <array>

namespace leadsman::ops {
namespace {

AttributeSpec parameter_spec(std::string_view name, double fallback, std::string_view meaning) {
  return {.name = name,
          .type = AttributeType::kNumber,
          .fallback = fallback,
          .meaning = meaning,
          .minimum = -1e30,
          .maximum = 1e30,
          .choices = {}};
}

class ActivationOperator final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "activation",
        .meaning = "one function applied to each value",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes =
            {
                {.name = "kind",
                 .type = AttributeType::kText,
                 .fallback = {},
                 .meaning = "which function",
                 .choices = {"relu", "relu6", "leaky_relu", "gelu", "gelu_tanh", "silu", "sigmoid",
                             "hard_sigmoid", "hard_swish", "tanh", "elu", "softplus", "mish",
                             "quick_gelu"}},
                parameter_spec("slope", 0.01, "of leaky_relu, below zero"),
                parameter_spec("alpha", 1.0, "of elu, which tends to -alpha below zero"),
            },
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override { return context.inputs[0]; }
  Cost cost(const OpContext&) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    static const std::array<const Strategy*, 2> all{&activation_vector(), &activation_reference()};
    return all;
  }
};

}  // namespace

Activation activation_of(const Attributes& attributes) {
  const ActivationKind kind = activation_kind(attributes.text("kind"));
  const char* parameter = kind == ActivationKind::kElu ? "alpha" : "slope";
  return {kind, static_cast<float>(attributes.number(parameter))};
}

const Operator& activation_operator() {
  static const ActivationOperator instance;
  return instance;
}

}  // namespace leadsman::ops
