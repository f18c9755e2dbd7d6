// What is done to each channel of a position by itself.
#pragma once

#include <cstdint>

namespace leadsman::ops::simd {

/// out[c] = a[c] * b[c]; `out` may be a or b.
void multiply_row(const float* a, const float* b, float* out, std::int64_t count);

/// What normalise_row() takes; one value a channel each.
struct Normalise {
  const float* mean;
  const float* scale;
  const float* bias;
  float low;  ///< bounds of the result
  float high;
};

/// out[c] = (x[c] - mean[c]) * scale[c] + bias[c] + residual[c] within the bounds; NaN stays.
/// `residual` may be null; `out` may be x or the residual.
void normalise_row(const Normalise& by, const float* x, const float* residual, float* out,
                   std::int64_t count);

}  // namespace leadsman::ops::simd
