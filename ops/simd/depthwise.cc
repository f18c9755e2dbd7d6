#include "ops/simd/depthwise.h"

#include <algorithm>
#include <utility>

#include "ops/simd/wanted_targets.h"

#ifndef LEADSMAN_UNROLL
#if defined(__clang__)
#define LEADSMAN_UNROLL _Pragma("clang loop unroll(full)")
#else
#define LEADSMAN_UNROLL _Pragma("GCC unroll 16")
#endif
#endif

#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "ops/simd/depthwise.cc"
#include "hwy/foreach_target.h"
#include "hwy/highway.h"
#include "ops/simd/math-inl.h"

HWY_BEFORE_NAMESPACE();
namespace leadsman::ops::simd::HWY_NAMESPACE {

// Vectors of channels that a tile of 7 pixels takes at once: with 32 registers two, to have
// enough sums under way.
#if HWY_TARGET == HWY_AVX3 || HWY_TARGET == HWY_NEON
constexpr int kVectorsOf7 = 2;
#else
constexpr int kVectorsOf7 = 1;
#endif

// What a stored sum still needs.
template <class D, class V = hn::Vec<D>>
HWY_INLINE void finish(D d, const DepthwiseTile& t, V sum, int pixel, std::int64_t channel) {
  const std::int64_t at = pixel * t.out_stride + channel;
  if (t.residual != nullptr) sum = hn::Add(sum, hn::LoadU(d, t.residual + at));
  sum = at_most(d, at_least(d, sum, hn::Set(d, t.low)), hn::Set(d, t.high));
  hn::StoreU(sum, d, t.out + at);
}

// Input column kX meets every window that covers it: loaded once, used up to kWidth times.
template <int kX, int kWidth, int kStride, int kPixels, int kVectors, class D, class V>
HWY_INLINE void add_column(D d, const float* pixel, const V (&weights)[kWidth][kVectors],
                           V (&sum)[kPixels][kVectors]) {
  if (pixel == nullptr) return;
  LEADSMAN_UNROLL
  for (int i = 0; i < kVectors; ++i) {
    const V value = hn::LoadU(d, pixel + i * static_cast<int>(hn::MaxLanes(d)));
    LEADSMAN_UNROLL
    for (int v = 0; v < kWidth; ++v) {
      if (kX >= v && (kX - v) % kStride == 0 && (kX - v) / kStride < kPixels) {
        constexpr int kLast = kPixels - 1;
        const int p = std::min((kX - v) / kStride, kLast);
        sum[p][i] = hn::MulAdd(value, weights[v][i], sum[p][i]);
      }
    }
  }
}

template <int kWidth, int kStride, int kPixels, int kVectors, class D, int... kX>
HWY_INLINE void add_row(D d, const float* const* inputs, std::int64_t channel,
                        const hn::Vec<D> (&weights)[kWidth][kVectors],
                        hn::Vec<D> (&sum)[kPixels][kVectors], std::integer_sequence<int, kX...>) {
  (add_column<kX, kWidth, kStride>(d, inputs[kX] == nullptr ? nullptr : inputs[kX] + channel,
                                   weights, sum),
   ...);
}

template <int kWidth, int kStride, int kPixels, int kVectors>
HWY_INLINE void channel_block(const DepthwiseTile& t, std::int64_t channel) {
  using D = hn::ScalableTag<float>;
  using V = hn::Vec<D>;
  const D d;
  constexpr int kLanes = static_cast<int>(hn::MaxLanes(D()));
  constexpr int kColumns = (kPixels - 1) * kStride + kWidth;
  V sum[kPixels][kVectors];
  LEADSMAN_UNROLL
  for (int i = 0; i < kVectors; ++i) {
    const V bias = hn::LoadU(d, t.bias + channel + i * kLanes);
    LEADSMAN_UNROLL
    for (int p = 0; p < kPixels; ++p) sum[p][i] = bias;
  }
  const float* w = t.weights + channel;
  for (std::int64_t u = 0; u < t.kernel_rows; ++u) {
    V weights[kWidth][kVectors];
    LEADSMAN_UNROLL
    for (int v = 0; v < kWidth; ++v) {
      LEADSMAN_UNROLL
      for (int i = 0; i < kVectors; ++i) {
        weights[v][i] = hn::LoadU(d, w + v * t.weight_stride + i * kLanes);
      }
    }
    add_row<kWidth, kStride>(d, t.inputs + u * kColumns, channel, weights, sum,
                             std::make_integer_sequence<int, kColumns>());
    w += kWidth * t.weight_stride;
  }
  LEADSMAN_UNROLL
  for (int p = 0; p < kPixels; ++p) {
    if (p < t.pixels) {
      LEADSMAN_UNROLL
      for (int i = 0; i < kVectors; ++i) finish(d, t, sum[p][i], p, channel + i * kLanes);
    }
  }
}

template <int kWidth, int kStride, int kPixels, int kVectors>
void special_tile(const DepthwiseTile& t) {
  constexpr auto kLanes = static_cast<std::int64_t>(hn::MaxLanes(hn::ScalableTag<float>()));
  std::int64_t c = 0;
  for (; c + kVectors * kLanes <= t.channels; c += kVectors * kLanes) {
    channel_block<kWidth, kStride, kPixels, kVectors>(t, c);
  }
  for (; c < t.channels; c += kLanes) {
    channel_block<kWidth, kStride, kPixels, 1>(t, std::min(c, t.channels - kLanes));
  }
}

// Any window: a pointer for each tap of each of 8 pixels.
constexpr int kGeneralPixels = static_cast<int>(DepthwiseTiling::kGeneralPixels);

template <class D>
void general_tile(const DepthwiseTile& t, std::int64_t taps) {
  using V = hn::Vec<D>;
  const D d;
  constexpr auto kLanes = static_cast<std::int64_t>(hn::MaxLanes(D()));
  for (std::int64_t block = 0; block < t.channels; block += kLanes) {
    const std::int64_t c = std::min(block, t.channels - kLanes);
    V sum[kGeneralPixels];
    const V bias = hn::LoadU(d, t.bias + c);
    LEADSMAN_UNROLL
    for (int p = 0; p < kGeneralPixels; ++p) sum[p] = bias;
    for (std::int64_t tap = 0; tap < taps; ++tap) {
      const V weight = hn::LoadU(d, t.weights + tap * t.weight_stride + c);
      const float* const* inputs = t.inputs + tap * kGeneralPixels;
      LEADSMAN_UNROLL
      for (int p = 0; p < kGeneralPixels; ++p) {
        if (inputs[p] != nullptr) {
          sum[p] = hn::MulAdd(hn::LoadU(d, inputs[p] + c), weight, sum[p]);
        }
      }
    }
    LEADSMAN_UNROLL
    for (int p = 0; p < kGeneralPixels; ++p) {
      if (p < t.pixels) finish(d, t, sum[p], p, c);
    }
  }
}

// Tiles of 14 pixels need 32 registers.
bool has_tiles_of_14() {
  return kVectorsOf7 == 2;
}

// `pixels` 14 or 7 of the windows that have code of their own; 0: any window.
void depthwise_tile(const DepthwiseTile& t, std::int64_t kernel_w, std::int64_t stride,
                    std::int64_t pixels) {
  constexpr auto kLanes = static_cast<std::int64_t>(hn::MaxLanes(hn::ScalableTag<float>()));
  if (pixels == 0) {
    const std::int64_t taps = t.kernel_rows * kernel_w;
    if (t.channels >= kLanes) return general_tile<hn::ScalableTag<float>>(t, taps);
    if (t.channels >= 4 && kLanes >= 4) return general_tile<hn::CappedTag<float, 4>>(t, taps);
    return general_tile<hn::CappedTag<float, 1>>(t, taps);
  }
  const std::int64_t key = kernel_w * 10 + stride;
#if HWY_TARGET == HWY_AVX3 || HWY_TARGET == HWY_NEON
  if (pixels == 14) {
    if (key == 31) return special_tile<3, 1, 14, 1>(t);
    if (key == 32) return special_tile<3, 2, 14, 1>(t);
    if (key == 51) return special_tile<5, 1, 14, 1>(t);
    if (key == 52) return special_tile<5, 2, 14, 1>(t);
    if (key == 71) return special_tile<7, 1, 14, 1>(t);
  }
#endif
  if (key == 31) return special_tile<3, 1, 7, kVectorsOf7>(t);
  if (key == 32) return special_tile<3, 2, 7, kVectorsOf7>(t);
  if (key == 51) return special_tile<5, 1, 7, kVectorsOf7>(t);
  if (key == 52) return special_tile<5, 2, 7, kVectorsOf7>(t);
  return special_tile<7, 1, 7, kVectorsOf7>(t);
}

}  // namespace leadsman::ops::simd::HWY_NAMESPACE
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace leadsman::ops::simd {
namespace {

HWY_EXPORT(depthwise_tile);
HWY_EXPORT(has_tiles_of_14);

bool has_own_code(std::int64_t kernel_w, std::int64_t stride) {
  return (stride == 1 && (kernel_w == 3 || kernel_w == 5 || kernel_w == 7)) ||
         (stride == 2 && (kernel_w == 3 || kernel_w == 5));
}

}  // namespace

DepthwiseTiling::DepthwiseTiling(std::int64_t out_w, std::int64_t channels, std::int64_t kernel_w,
                                 std::int64_t stride, std::int64_t dilation)
    : kernel_w_(kernel_w), stride_(stride), dilation_(dilation), special_pixels_(0) {
  constexpr std::int64_t kLongestVector = 16;
  if (dilation > 1 || channels < kLongestVector || !has_own_code(kernel_w, stride)) return;
  // 7 divides the usual sizes (7, 14, 28, ...).
  const bool wide = (out_w + 13) / 14 * 14 - out_w < 7;
  special_pixels_ = wide && HWY_DYNAMIC_DISPATCH(has_tiles_of_14)() ? 14 : 7;
}

std::int64_t DepthwiseTiling::columns() const {
  if (special_pixels_ == 0) return kernel_w_ * kGeneralPixels;
  return (special_pixels_ - 1) * stride_ + kernel_w_;
}

std::int64_t DepthwiseTiling::max_columns(std::int64_t kernel_w, std::int64_t stride) {
  const std::int64_t general = kernel_w * kGeneralPixels;
  if (!has_own_code(kernel_w, stride)) return general;
  return std::max(general, (kMaxPixels - 1) * stride + kernel_w);
}

std::int64_t DepthwiseTiling::x(std::int64_t index) const {
  if (special_pixels_ != 0) return index;
  return index % kGeneralPixels * stride_ + index / kGeneralPixels * dilation_;
}

bool DepthwiseTiling::used(std::int64_t index, std::int64_t pixels) const {
  if (special_pixels_ != 0) return index < (pixels - 1) * stride_ + kernel_w_;
  return index % kGeneralPixels < pixels;
}

void DepthwiseTile::run(const DepthwiseTiling& tiling) const {
  HWY_DYNAMIC_DISPATCH(depthwise_tile)
  (*this, tiling.kernel_w_, tiling.stride_, tiling.special_pixels_);
}

}  // namespace leadsman::ops::simd
#endif  // HWY_ONCE
