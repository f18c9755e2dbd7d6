// The transforms of Winograd's convolution (ops/conv2d/winograd.h), one tile at a time. Vectors run
// along the channels, of which there must be at least kMinWinogradChannels; the last vector is
// moved back to end with the last channel, so some values may be stored twice, with the same bits.
//
// `tile` is m, the side of a tile of outputs: 2 or 4. Transformed tiles have (m+2)^2 positions in
// rows, position p of channel c at p * position_stride + c.
#pragma once

#include <cstdint>

#include "ops/epilogue.h"

namespace leadsman::ops::simd {

inline constexpr std::int64_t kMinWinogradChannels = 16;

struct WinogradInput {
  const float* const* pixels = nullptr;  ///< (m+2)^2 input pixels, in rows; any may be a zero pixel
  std::int64_t channels = 0;
  float* out = nullptr;  ///< B^T d B
  std::int64_t position_stride = 0;
};

void winograd_input(int tile, const WinogradInput& call);

struct WinogradOutput {
  const float* sums = nullptr;  ///< products summed over the input channels
  std::int64_t position_stride = 0;
  std::int64_t channels = 0;
  const float* bias = nullptr;
  float* out = nullptr;  ///< output pixel (i, j) of the tile at out + i * row_stride + j * stride
  std::int64_t row_stride = 0;
  std::int64_t stride = 0;
  std::int64_t rows = 0;  ///< rows and columns of the tile that lie in the image, 1 to m
  std::int64_t cols = 0;
  const float* residual = nullptr;  ///< as out, or null; not out itself
  Activation activation;
};

/// out = activation(A^T sums A + bias + residual)
void winograd_output(int tile, const WinogradOutput& call);

}  // namespace leadsman::ops::simd
