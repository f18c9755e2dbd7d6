// Vector forms of every activation.
//
// Largest errors in units in the last place against double precision over [-12, 12], with fused
// multiply-add (AVX-512, AVX2, NEON) and without (SSE4, portable), as tests/ops/activation_test.cc
// measures and bounds them; values below 2^-20 in size count in the units of 2^-20:
//
//   relu, relu6     0     0      silu           2     2      hard_swish     2     2
//   leaky_relu    0.5   0.5      sigmoid        2     2      tanh         1.5   1.5
//   gelu            6    12      hard_sigmoid   1     1      e^x            1     1
//   elu             1     1      softplus       3     3      mish         4.5   4.5
//   gelu_tanh      20    24      (x^3 rounds before the exponential: the tail below -2)
//   quick_gelu     13    13      (so does 1.702 x)
//
// NaN stays NaN; infinities give what the plain form in epilogue.h gives.
#pragma once

#include <cstdint>
#include <optional>

#include "ops/epilogue.h"

namespace leadsman::ops::simd {

/// out[i] = activation(in[i]); `in` and `out` may be the same, but not overlap otherwise.
void activate_row(const Activation& activation, const float* in, float* out, std::int64_t count);

/// e^x of each value; overflows to infinity, underflows through subnormals to 0.
void exponential_row(const float* in, float* out, std::int64_t count);

/// The activations that are no more than bounds, which kernels apply in registers.
struct Bounds {
  float low;
  float high;
};
std::optional<Bounds> activation_bounds(const Activation& activation);

}  // namespace leadsman::ops::simd
