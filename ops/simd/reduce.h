// Reductions over one row of neighbouring floats, and over the rows of a matrix.
//
// Sums run in a fixed order that depends on the instruction set but on nothing else.
#pragma once

#include <cstdint>

namespace leadsman::ops::simd {

/// out = (in - mean) / sqrt(variance + eps) * weight + bias; mean and variance by two passes.
/// `weight` and `bias` may be null. `in` and `out` may be the same.
void layer_norm_row(const float* in, const float* weight, const float* bias, float eps, float* out,
                    std::int64_t count);

/// out = exp(in - max) / sum; what is below e^-86 of the largest becomes 0. `in` and `out` may be
/// the same. A NaN makes the whole row NaN.
void softmax_row(const float* in, float* out, std::int64_t count);

/// One block of an online softmax (Milakov & Gimelshein 2018): raises `largest` to the largest of
/// the scores, replaces each by exp(score - largest), and returns their sum. Requires room behind
/// the scores up to a multiple of 16 floats; what stands there is overwritten.
float exponentiate_row(float* scores, std::int64_t count, float& largest);

/// values *= factor.
void scale_row(float* values, std::int64_t count, float factor);
/// out = in * factor.
void scale_row(const float* in, float* out, std::int64_t count, float factor);

/// out[c] = mean over r of in[r * stride + c].
void column_means(const float* in, std::int64_t rows, std::int64_t cols, std::int64_t stride,
                  float* out);

}  // namespace leadsman::ops::simd
