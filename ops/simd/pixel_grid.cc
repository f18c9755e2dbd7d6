#include "ops/simd/pixel_grid.h"

#include <cstddef>
#include <limits>

#include "ops/simd/wanted_targets.h"

#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "ops/simd/pixel_grid.cc"
#include "hwy/foreach_target.h"
#include "hwy/highway.h"

HWY_BEFORE_NAMESPACE();
namespace leadsman::ops::simd::HWY_NAMESPACE {

namespace hn = hwy::HWY_NAMESPACE;
using D = hn::ScalableTag<float>;
using V = hn::Vec<D>;
constexpr auto kLanes = static_cast<std::int64_t>(hn::MaxLanes(D()));
constexpr std::int64_t kPixelsInPart = 64;

// kVectors vectors of channels from channel `c` on.
template <int kVectors>
HWY_INLINE void mean_of_block(const PixelGrid& grid, std::int64_t c, float divisor, float* out) {
  const D d;
  V total[kVectors];
  V part[kVectors];
  for (int v = 0; v < kVectors; ++v) total[v] = part[v] = hn::Zero(d);
  std::int64_t in_part = 0;
  for (std::int64_t r = 0; r < grid.rows; ++r) {
    const float* pixel = grid.first + r * grid.row_stride + c;
    for (std::int64_t k = 0; k < grid.columns; ++k, pixel += grid.column_stride) {
      for (int v = 0; v < kVectors; ++v) {
        part[v] = hn::Add(part[v], hn::LoadU(d, pixel + v * kLanes));
      }
      if (++in_part < kPixelsInPart) continue;
      in_part = 0;
      for (int v = 0; v < kVectors; ++v) {
        total[v] = hn::Add(total[v], part[v]);
        part[v] = hn::Zero(d);
      }
    }
  }
  for (int v = 0; v < kVectors; ++v) {
    const V sum = hn::Add(total[v], part[v]);
    hn::StoreU(hn::Div(sum, hn::Set(d, divisor)), d, out + c + v * kLanes);
  }
}

template <int kVectors>
HWY_INLINE void max_of_block(const PixelGrid& grid, std::int64_t c, float* out) {
  const D d;
  V largest[kVectors];
  for (int v = 0; v < kVectors; ++v) {
    largest[v] = hn::Set(d, -std::numeric_limits<float>::infinity());
  }
  for (std::int64_t r = 0; r < grid.rows; ++r) {
    const float* pixel = grid.first + r * grid.row_stride + c;
    for (std::int64_t k = 0; k < grid.columns; ++k, pixel += grid.column_stride) {
      for (int v = 0; v < kVectors; ++v) {
        const V value = hn::LoadU(d, pixel + v * kLanes);
        const auto wins = hn::Or(hn::Gt(value, largest[v]), hn::IsNaN(value));
        largest[v] = hn::IfThenElse(wins, value, largest[v]);
      }
    }
  }
  for (int v = 0; v < kVectors; ++v) hn::StoreU(largest[v], d, out + c + v * kLanes);
}

// Calls wide(c) for four vectors of channels at a time, then narrow(c) for one. Requires
// channels >= kLanes.
template <class Wide, class Narrow>
HWY_INLINE void for_channels(std::int64_t channels, const Wide& wide, const Narrow& narrow) {
  std::int64_t c = 0;
  for (; c + 4 * kLanes <= channels; c += 4 * kLanes) wide(c);
  for (; c + kLanes <= channels; c += kLanes) narrow(c);
  if (c < channels) narrow(channels - kLanes);
}

void mean_of_pixels(const PixelGrid& grid, std::int64_t channels, double divisor, float* out) {
  if (channels < kLanes) return ops::mean_of_pixels(grid, channels, divisor, out);
  const auto by = static_cast<float>(divisor);
  for_channels(
      channels, [&](std::int64_t c) HWY_ATTR { mean_of_block<4>(grid, c, by, out); },
      [&](std::int64_t c) HWY_ATTR { mean_of_block<1>(grid, c, by, out); });
}

void max_of_pixels(const PixelGrid& grid, std::int64_t channels, float* out) {
  if (channels < kLanes) return ops::max_of_pixels(grid, channels, out);
  for_channels(
      channels, [&](std::int64_t c) HWY_ATTR { max_of_block<4>(grid, c, out); },
      [&](std::int64_t c) HWY_ATTR { max_of_block<1>(grid, c, out); });
}

}  // namespace leadsman::ops::simd::HWY_NAMESPACE
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace leadsman::ops::simd {

HWY_EXPORT(mean_of_pixels);
HWY_EXPORT(max_of_pixels);

void mean_of_pixels(const PixelGrid& grid, std::int64_t channels, double divisor, float* out) {
  HWY_DYNAMIC_DISPATCH(mean_of_pixels)(grid, channels, divisor, out);
}

void max_of_pixels(const PixelGrid& grid, std::int64_t channels, float* out) {
  HWY_DYNAMIC_DISPATCH(max_of_pixels)(grid, channels, out);
}

}  // namespace leadsman::ops::simd
#endif  // HWY_ONCE
