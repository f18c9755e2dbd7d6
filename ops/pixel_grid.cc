#include "ops/pixel_grid.h"

#include <algorithm>
#include <cmath>
#include <limits>

namespace leadsman::ops {

void mean_of_pixels(const PixelGrid& grid, std::int64_t channels, double divisor, float* out) {
  constexpr std::int64_t kBlock = 64;  // channels whose sums stay in the first-level cache
  for (std::int64_t begin = 0; begin < channels; begin += kBlock) {
    const std::int64_t count = std::min(kBlock, channels - begin);
    double sums[kBlock] = {};
    for (std::int64_t r = 0; r < grid.rows; ++r) {
      for (std::int64_t k = 0; k < grid.columns; ++k) {
        const float* pixel = grid.first + r * grid.row_stride + k * grid.column_stride + begin;
        for (std::int64_t c = 0; c < count; ++c) sums[c] += static_cast<double>(pixel[c]);
      }
    }
    for (std::int64_t c = 0; c < count; ++c) {
      out[begin + c] = static_cast<float>(sums[c] / divisor);
    }
  }
}

void max_of_pixels(const PixelGrid& grid, std::int64_t channels, float* out) {
  for (std::int64_t c = 0; c < channels; ++c) {
    float largest = -std::numeric_limits<float>::infinity();
    for (std::int64_t r = 0; r < grid.rows; ++r) {
      for (std::int64_t k = 0; k < grid.columns; ++k) {
        const float value = grid.first[r * grid.row_stride + k * grid.column_stride + c];
        if (value > largest || std::isnan(value)) largest = value;
      }
    }
    out[c] = largest;
  }
}

}  // namespace leadsman::ops
