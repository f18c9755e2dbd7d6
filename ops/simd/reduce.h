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

/// Rows of scores on their way to a softmax.
struct ScoreRows {
  float* scores = nullptr;  ///< row r at scores + r * stride
  std::int64_t stride = 0;
  std::int64_t rows = 0;
  std::int64_t count = 0;  ///< scores of a row
  float factor = 1.0F;
  const float* bias = nullptr;  ///< row r at bias + r * term_stride; null: none
  const float* mask = nullptr;  ///< the same
  std::int64_t term_stride = 0;
  float* largest = nullptr;  ///< of each row
  float* sums = nullptr;     ///< of each row
};

/// One block of an online softmax (Milakov & Gimelshein 2018), for each row: s = factor * score +
/// bias + mask; raises `largest` to the largest s, replaces the scores by exp(s - largest), and
/// sets `sums` to their sum. Requires a stride of at least `count` rounded up to a multiple of 16;
/// what stands behind the scores is overwritten.
void exponentiate_rows(const ScoreRows& call);

/// values *= factor.
void scale_row(float* values, std::int64_t count, float factor);
/// out = in * factor.
void scale_row(const float* in, float* out, std::int64_t count, float factor);

/// out[c] = mean over r of in[r * stride + c].
void column_means(const float* in, std::int64_t rows, std::int64_t cols, std::int64_t stride,
                  float* out);

}  // namespace leadsman::ops::simd
