// What pooling does under one window: a reduction over pixels, for each channel.
#pragma once

#include <cstdint>

namespace leadsman::ops {

/// Pixels at equal distances in an image as it lies in memory: pixel (r, k) begins at
/// first + r * row_stride + k * column_stride, its channels side by side.
struct PixelGrid {
  const float* first;
  std::int64_t rows, columns;
  std::int64_t row_stride, column_stride;  ///< in floats
};

/// Shapes of mean_of_pixels() and max_of_pixels(), here and in simd/pixel_grid.h.
using MeanOfPixels = void (*)(const PixelGrid& grid, std::int64_t channels, double divisor,
                              float* out);
using MaxOfPixels = void (*)(const PixelGrid& grid, std::int64_t channels, float* out);

/// out[c] = sum of channel c over the grid / divisor, for c in [0, channels). In double.
void mean_of_pixels(const PixelGrid& grid, std::int64_t channels, double divisor, float* out);

/// out[c] = the largest value of channel c on the grid; a NaN if there is one, -infinity if there
/// are no pixels.
void max_of_pixels(const PixelGrid& grid, std::int64_t channels, float* out);

}  // namespace leadsman::ops
