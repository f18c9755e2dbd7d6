// One output row of a depthwise convolution.
//
//   out[j, c] = bounds(bias[c] + sum over u, v of
//                      weights[u, v, c] * lines[u][x(j, v), c] + residual[j, c])
//   x(j, v)   = first_x + j * stride + v * dilation; terms whose x is not in [0, input_w) are left
//               out
//
// Sums run over u, then v. Vectors run along the channels; the last one is moved back to end with
// the last channel, so some values may be stored twice, with the same bits. The caller leaves
// kernel rows in the padding out of `lines` and `weights`.
#pragma once

#include <cstdint>

namespace leadsman::ops::simd {

struct DepthwiseRow {
  const float* const* lines = nullptr;  ///< [kernel_rows]: pixel x = 0 of each input row
  std::int64_t kernel_rows = 0;
  std::int64_t input_w = 0;
  std::int64_t input_stride = 0;  ///< floats from one pixel to the next
  std::int64_t first_x = 0;       ///< minus the padding on the left
  std::int64_t kernel_w = 0;
  std::int64_t stride = 1;
  std::int64_t dilation = 1;

  const float* weights = nullptr;  ///< [kernel_rows][kernel_w][weight_stride]
  std::int64_t weight_stride = 0;
  const float* bias = nullptr;
  std::int64_t channels = 0;

  float* out = nullptr;  ///< pixel j at out + j * out_stride
  std::int64_t out_stride = 0;
  std::int64_t out_w = 0;
  const float* residual = nullptr;  ///< as out, or null
  float low = 0.0F;
  float high = 0.0F;
};

void depthwise_row(const DepthwiseRow& row);

}  // namespace leadsman::ops::simd
