#include "ops/epilogue.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <numbers>
#include <string>
#include <utility>

#include "leadsman/error.h"

namespace leadsman::ops {
namespace {

constexpr std::array<std::pair<std::string_view, ActivationKind>, 14> kNames{{
    {"relu", ActivationKind::kRelu},
    {"relu6", ActivationKind::kRelu6},
    {"leaky_relu", ActivationKind::kLeakyRelu},
    {"gelu", ActivationKind::kGelu},
    {"gelu_tanh", ActivationKind::kGeluTanh},
    {"silu", ActivationKind::kSilu},
    {"sigmoid", ActivationKind::kSigmoid},
    {"hard_sigmoid", ActivationKind::kHardSigmoid},
    {"hard_swish", ActivationKind::kHardSwish},
    {"tanh", ActivationKind::kTanh},
    {"elu", ActivationKind::kElu},
    {"softplus", ActivationKind::kSoftplus},
    {"mish", ActivationKind::kMish},
    {"quick_gelu", ActivationKind::kQuickGelu},
}};

double relu6(double x) {
  return std::min(std::max(x, 0.0), 6.0);
}
double sigmoid(double x) {
  return 1.0 / (1.0 + std::exp(-x));
}
double softplus(double x) {
  return std::max(x, 0.0) + std::log1p(std::exp(-std::abs(x)));
}

}  // namespace

double activate(Activation activation, double x) {
  if (std::isnan(x)) return x;
  switch (activation.kind) {
    case ActivationKind::kNone:
      return x;
    case ActivationKind::kRelu:
      return std::max(x, 0.0);
    case ActivationKind::kRelu6:
      return relu6(x);
    case ActivationKind::kLeakyRelu:
      return x >= 0.0 ? x : static_cast<double>(activation.parameter) * x;
    case ActivationKind::kGelu:
      return 0.5 * x * std::erfc(-x / std::numbers::sqrt2);
    case ActivationKind::kGeluTanh: {
      const double inner = std::sqrt(2.0 / std::numbers::pi) * (x + 0.044715 * x * x * x);
      return 0.5 * x * (1.0 + std::tanh(inner));
    }
    case ActivationKind::kSilu:
      return x * sigmoid(x);
    case ActivationKind::kSigmoid:
      return sigmoid(x);
    case ActivationKind::kHardSigmoid:
      return relu6(x + 3.0) / 6.0;
    case ActivationKind::kHardSwish:
      return x * relu6(x + 3.0) / 6.0;
    case ActivationKind::kTanh:
      return std::tanh(x);
    case ActivationKind::kElu:
      return x >= 0.0 ? x : static_cast<double>(activation.parameter) * std::expm1(x);
    case ActivationKind::kSoftplus:
      return softplus(x);
    case ActivationKind::kMish:
      return x * std::tanh(softplus(x));
    case ActivationKind::kQuickGelu:
      return x * sigmoid(1.702 * x);
  }
  return x;
}

ActivationKind activation_kind(std::string_view name) {
  for (const auto& [word, kind] : kNames) {
    if (word == name) return kind;
  }
  throw_input("no activation is called '" + std::string(name) + "'");
}

std::string_view activation_name(ActivationKind kind) {
  for (const auto& [word, k] : kNames) {
    if (k == kind) return word;
  }
  return "none";
}

}  // namespace leadsman::ops
