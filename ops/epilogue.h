// What follows a sum before it is stored: y = activation(sum + bias + residual).
//
// The bias is a weight of the operator itself (batch-norm is folded into it); residual and
// activation come from later layers that the planner fused. Every kernel of an operator whose
// takes_epilogue() is true honours it, the reference kernels too, so fusion never needs a new
// family of kernels.
#pragma once

#include <string_view>

namespace leadsman::ops {

enum class ActivationKind {
  kNone,
  kRelu,
  kRelu6,
  kLeakyRelu,  ///< slope of the negative side in `parameter`
  kGelu,       ///< x * Phi(x), exact, through erf (Hendrycks & Gimpel 2016)
  kGeluTanh,   ///< the tanh approximation of the same paper
  kSilu,       ///< x * sigmoid(x)
  kSigmoid,
  kHardSigmoid,  ///< relu6(x + 3) / 6 (Howard et al. 2019)
  kHardSwish,    ///< x * relu6(x + 3) / 6 (Howard et al. 2019)
  kTanh,
  kElu,        ///< x, below zero a (e^x - 1) with a in `parameter` (Clevert et al. 2016)
  kSoftplus,   ///< log(1 + e^x) (Dugas et al. 2001)
  kMish,       ///< x * tanh(softplus(x)) (Misra 2020)
  kQuickGelu,  ///< x * sigmoid(1.702 x), the sigmoid approximation of Hendrycks & Gimpel 2016
};

struct Activation {
  ActivationKind kind = ActivationKind::kNone;
  float parameter = 0.0F;
};

struct Epilogue {
  bool has_residual = false;
  Activation activation;
};

/// The plain form, in double: the oracle of every vector version.
double activate(Activation activation, double x);
/// "relu", "gelu_tanh", ...; throws Error(kInput) on another word.
ActivationKind activation_kind(std::string_view name);
std::string_view activation_name(ActivationKind kind);

}  // namespace leadsman::ops
