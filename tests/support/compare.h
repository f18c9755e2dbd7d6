// How close two tensors are, and how close they have to be.
#pragma once

#include <cstdint>

#include "leadsman/tensor.h"

namespace leadsman::testing {

/// Unit roundoff of float32, 2^-24.
inline constexpr double kUnitRoundoff = 0x1p-24;

/// How far a float32 sum of `reduction` products may be from the exact one, relative to the size
/// of its values: `factor` * sqrt(reduction) * u (the probabilistic bound of Higham & Mary 2019;
/// the factor covers the largest of many errors), plus a few roundings of what follows the sum.
double rounding_threshold(std::int64_t reduction, double factor = 8.0);

/// Root of the mean square.
double rms(const Tensor& tensor);

/// Fails unless shapes agree and each value is within rounding_threshold(reduction) *
/// max(magnitude, its own size) of the expected one. `magnitude` is the RMS of the sums before
/// any activation or cancellation; 0: the RMS of `expected`. NaN and infinities must match.
void expect_close(const Tensor& actual, const Tensor& expected, std::int64_t reduction,
                  double magnitude = 0.0, double factor = 8.0);

/// Fails unless shapes and all bits agree.
void expect_same_bits(const Tensor& actual, const Tensor& expected);

/// Distance in units in the last place of `expected` rounded to float; 0 when both are NaN or
/// the same infinity, infinity when only one is. Below the smallest normal number an ulp is that
/// of the smallest normal number.
double ulp_distance(float actual, double expected);

}  // namespace leadsman::testing
