// Means over rectangles of an image, for a few neighbouring channels at once: what every average
// pooling does. The sums are in double, so that even the mean of a whole image is rounded once.
#pragma once

#include <algorithm>
#include <array>
#include <cstdint>

namespace leadsman::ops {

/// Channels summed at once: the sums stay in the first-level cache.
inline constexpr std::int64_t kMeanChannels = 64;

/// One image as it lies in memory: height x width positions of `channels` neighbouring floats.
struct ImageMemory {
  const float* data;
  std::int64_t width;
  std::int64_t channels;
};

struct Rectangle {
  std::int64_t top, left, bottom, right;  ///< bottom and right are outside
};

/// out[c] = sum of channel c over the rectangle / divisor, for c in [first, first + kMeanChannels)
/// as far as there are channels. Only those values of `out` are written.
inline void rectangle_mean(const ImageMemory& image, const Rectangle& r, std::int64_t first,
                           double divisor, float* out) {
  const std::int64_t count = std::min(kMeanChannels, image.channels - first);
  std::array<double, kMeanChannels> sums{};
  for (std::int64_t y = r.top; y < r.bottom; ++y) {
    for (std::int64_t x = r.left; x < r.right; ++x) {
      const float* pixel = image.data + (y * image.width + x) * image.channels + first;
      for (std::int64_t c = 0; c < count; ++c) {
        sums[static_cast<std::size_t>(c)] += static_cast<double>(pixel[c]);
      }
    }
  }
  for (std::int64_t c = 0; c < count; ++c) {
    out[first + c] = static_cast<float>(sums[static_cast<std::size_t>(c)] / divisor);
  }
}

}  // namespace leadsman::ops
