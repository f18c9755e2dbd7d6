// Some output rows of a depthwise 3x3 convolution of stride 1 or 2, without dilation.
//
//   out[i, j, c] = activation(bias[c] + sum over u, v of weights[u, v, c] *
//                             lines[i * stride + u][first_x + j * stride + v, c] + residual[i, j,
//                             c])
//
// Columns outside [0, input_w) are zero. Tiles of two rows by four pixels, or three, share what
// they load: each input value meets every window of the tile that covers it. Sums run over u, then
// v. The last vector of channels is moved back to end with the last one, so some values may be
// stored twice, with the same bits.
#pragma once

#include <cstdint>

#include "ops/epilogue.h"

namespace leadsman::ops::simd {

/// The fewest channels: the longest vector.
inline constexpr std::int64_t kMinDepthwise3Channels = 16;
/// Strips of an even number of rows waste nothing.
inline constexpr std::int64_t kDepthwise3Rows = 2;
/// Output widths that are sums of threes and fours.
constexpr bool depthwise3_takes_width(std::int64_t w) {
  return w == 3 || w == 4 || w >= 6;
}

struct Depthwise3 {
  /// [(rows - 1) * stride + 3]: pixel x = 0 of each input row; null: a row of zeros.
  const float* const* lines = nullptr;
  std::int64_t input_w = 0;
  std::int64_t input_stride = 0;  ///< floats from one pixel to the next
  std::int64_t first_x = 0;       ///< minus the padding on the left
  int stride = 1;

  const float* weights = nullptr;  ///< [3][3][weight_stride]
  std::int64_t weight_stride = 0;
  const float* bias = nullptr;
  std::int64_t channels = 0;

  float* out = nullptr;  ///< pixel (i, j) at out + i * out_row + j * out_stride
  std::int64_t out_row = 0;
  std::int64_t out_stride = 0;
  std::int64_t out_w = 0;  ///< depthwise3_takes_width()
  std::int64_t rows = 0;
  const float* residual = nullptr;  ///< as out, or null; not out itself
  Activation activation;
};

void depthwise3(const Depthwise3& call);

}  // namespace leadsman::ops::simd
