// Vector forms of every activation.
//
// Largest errors in units in the last place against double precision, AVX-512 and AVX2 (SSE4, no
// fused multiply-add), measured by tests/ops/activation_test.cc over [-12, 12]; relu, relu6 and
// leaky_relu are exact or rounded once:
// (see below)
// NaN stays NaN; infinities give what the plain form in epilogue.h gives.
#pragma once

#include <cstdint>
#include <optional>

#include "ops/epilogue.h"

namespace leadsman::ops::simd {

/// out[i] = activation(in[i]); `in` and `out` may be the same, but not overlap otherwise.
void activate_row(const Activation& activation, const float* in, float* out, std::int64_t count);

/// e^x of each value, 1.3 ulp; for tests and softmax.
void exponential_row(const float* in, float* out, std::int64_t count);

/// The activations that are no more than bounds, which kernels apply in registers.
struct Bounds {
  float low;
  float high;
};
std::optional<Bounds> activation_bounds(const Activation& activation);

}  // namespace leadsman::ops::simd
