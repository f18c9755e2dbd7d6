// Reductions over the pixels under a pooling window, vectors running along the channels. Where the
// channels fill no whole vector, the last one is moved back to end with the last channel, so some
// values are stored twice, with the same bits.
#pragma once

#include "ops/pixel_grid.h"

namespace leadsman::ops::simd {

/// As ops::mean_of_pixels, in float: partial sums of 64 pixels, whose sums are added up, so that
/// errors grow like sqrt(64) + sqrt(pixels / 64) rather than sqrt(pixels).
void mean_of_pixels(const PixelGrid& grid, std::int64_t channels, double divisor, float* out);

/// As ops::max_of_pixels, bit for bit but for the payload of a NaN.
void max_of_pixels(const PixelGrid& grid, std::int64_t channels, float* out);

}  // namespace leadsman::ops::simd
