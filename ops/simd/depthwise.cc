#include "ops/simd/depthwise.h"

#include <algorithm>
#include <utility>

#include "ops/simd/unroll.h"
#include "ops/simd/wanted_targets.h"

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
HWY_INLINE void finish(D d, const DepthwiseRow& row, V sum, std::int64_t pixel,
                       std::int64_t channel) {
  const std::int64_t at = pixel * row.out_stride + channel;
  if (row.residual != nullptr) sum = hn::Add(sum, hn::LoadU(d, row.residual + at));
  sum = at_most(d, at_least(d, sum, hn::Set(d, row.low)), hn::Set(d, row.high));
  hn::StoreU(sum, d, row.out + at);
}

// Some neighbouring output pixels: `count` of them from `pixel`, whose windows begin at column x.
// The row is a copy: stores of floats cannot change it.
struct Tile {
  DepthwiseRow row;
  std::int64_t pixel;
  std::int64_t count;
  std::int64_t x;
};

// Input column kX, counted from the tile's first, meets every window that covers it: loaded once,
// used up to kWidth times. Left out when it is not in [begin, end).
template <bool kInside, int kX, int kWidth, int kStride, int kPixels, int kVectors, class D,
          class V = hn::Vec<D>>
HWY_INLINE void add_column(D d, const float* line, std::int64_t stride, std::int64_t begin,
                           std::int64_t end, const V (&weights)[kWidth][kVectors],
                           V (&sum)[kPixels][kVectors]) {
  if (!kInside && (kX < begin || kX >= end)) return;
  const float* pixel = line + kX * stride;
  LEADSMAN_UNROLL
  for (int i = 0; i < kVectors; ++i) {
    const V value = hn::LoadU(d, pixel + i * static_cast<int>(hn::MaxLanes(d)));
    LEADSMAN_UNROLL
    for (int v = 0; v < kWidth; ++v) {
      if (kX >= v && (kX - v) % kStride == 0 && (kX - v) / kStride < kPixels) {
        const int p = std::min((kX - v) / kStride, kPixels - 1);
        sum[p][i] = hn::MulAdd(value, weights[v][i], sum[p][i]);
      }
    }
  }
}

template <bool kInside, int kStride, int kWidth, int kPixels, int kVectors, class D, int... kX>
HWY_INLINE void add_line(D d, const float* line, std::int64_t stride, std::int64_t begin,
                         std::int64_t end, const hn::Vec<D> (&weights)[kWidth][kVectors],
                         hn::Vec<D> (&sum)[kPixels][kVectors], std::integer_sequence<int, kX...>) {
  (add_column<kInside, kX, kWidth, kStride, kPixels, kVectors>(d, line, stride, begin, end, weights,
                                                               sum),
   ...);
}

template <bool kInside, int kWidth, int kStride, int kPixels, int kVectors>
HWY_INLINE void channel_block(const Tile& tile, std::int64_t channel) {
  using D = hn::ScalableTag<float>;
  using V = hn::Vec<D>;
  const D d;
  const DepthwiseRow& row = tile.row;
  constexpr int kLanes = static_cast<int>(hn::MaxLanes(D()));
  constexpr int kColumns = (kPixels - 1) * kStride + kWidth;
  V sum[kPixels][kVectors];
  LEADSMAN_UNROLL
  for (int i = 0; i < kVectors; ++i) {
    const V bias = hn::LoadU(d, row.bias + channel + i * kLanes);
    LEADSMAN_UNROLL
    for (int p = 0; p < kPixels; ++p) sum[p][i] = bias;
  }
  const std::int64_t begin = -tile.x;
  const std::int64_t end = std::min(row.input_w - tile.x, (tile.count - 1) * kStride + kWidth);
  const float* w = row.weights + channel;
  const std::int64_t offset = tile.x * row.input_stride + channel;
  for (std::int64_t u = 0; u < row.kernel_rows; ++u) {
    V weights[kWidth][kVectors];
    LEADSMAN_UNROLL
    for (int v = 0; v < kWidth; ++v) {
      LEADSMAN_UNROLL
      for (int i = 0; i < kVectors; ++i) {
        weights[v][i] = hn::LoadU(d, w + v * row.weight_stride + i * kLanes);
      }
    }
    add_line<kInside, kStride>(d, row.lines[u] + offset, row.input_stride, begin, end, weights, sum,
                               std::make_integer_sequence<int, kColumns>());
    w += kWidth * row.weight_stride;
  }
  LEADSMAN_UNROLL
  for (int p = 0; p < kPixels; ++p) {
    if (kInside || p < tile.count) {
      LEADSMAN_UNROLL
      for (int i = 0; i < kVectors; ++i) {
        finish(d, row, sum[p][i], tile.pixel + p, channel + i * kLanes);
      }
    }
  }
}

template <bool kInside, int kWidth, int kStride, int kPixels, int kVectors>
HWY_INLINE void special_tile(const Tile& given) {
  const Tile tile = given;
  constexpr auto kLanes = static_cast<std::int64_t>(hn::MaxLanes(hn::ScalableTag<float>()));
  const std::int64_t channels = tile.row.channels;
  std::int64_t c = 0;
  for (; c + kVectors * kLanes <= channels; c += kVectors * kLanes) {
    channel_block<kInside, kWidth, kStride, kPixels, kVectors>(tile, c);
  }
  for (; c < channels; c += kLanes) {
    channel_block<kInside, kWidth, kStride, kPixels, 1>(tile, std::min(c, channels - kLanes));
  }
}

// A row of a window that has code of its own.
template <int kWidth, int kStride, int kPixels, int kVectors>
void special_row(const DepthwiseRow& row) {
  constexpr int kColumns = (kPixels - 1) * kStride + kWidth;
  for (std::int64_t j = 0; j < row.out_w; j += kPixels) {
    const Tile tile{row, j, std::min<std::int64_t>(kPixels, row.out_w - j),
                    row.first_x + j * kStride};
    if (tile.count == kPixels && tile.x >= 0 && tile.x + kColumns <= row.input_w) {
      special_tile<true, kWidth, kStride, kPixels, kVectors>(tile);
    } else {
      special_tile<false, kWidth, kStride, kPixels, kVectors>(tile);
    }
  }
}

// Any window, 8 pixels at a time.
template <class D>
void general_row(const DepthwiseRow& row) {
  using V = hn::Vec<D>;
  const D d;
  constexpr int kPixels = 8;
  constexpr auto kLanes = static_cast<std::int64_t>(hn::MaxLanes(D()));
  for (std::int64_t j = 0; j < row.out_w; j += kPixels) {
    const std::int64_t count = std::min<std::int64_t>(kPixels, row.out_w - j);
    for (std::int64_t block = 0; block < row.channels; block += kLanes) {
      const std::int64_t c = std::min(block, row.channels - kLanes);
      const float* weights = row.weights + c;
      V sum[kPixels];
      const V bias = hn::LoadU(d, row.bias + c);
      LEADSMAN_UNROLL
      for (int p = 0; p < kPixels; ++p) sum[p] = bias;
      for (std::int64_t u = 0; u < row.kernel_rows; ++u) {
        for (std::int64_t v = 0; v < row.kernel_w; ++v) {
          const V weight = hn::LoadU(d, weights);
          weights += row.weight_stride;
          const std::int64_t x = row.first_x + j * row.stride + v * row.dilation;
          LEADSMAN_UNROLL
          for (int p = 0; p < kPixels; ++p) {
            const std::int64_t at = x + p * row.stride;
            if (p < count && at >= 0 && at < row.input_w) {
              const V value = hn::LoadU(d, row.lines[u] + at * row.input_stride + c);
              sum[p] = hn::MulAdd(value, weight, sum[p]);
            }
          }
        }
      }
      LEADSMAN_UNROLL
      for (int p = 0; p < kPixels; ++p) {
        if (p < count) finish(d, row, sum[p], j + p, c);
      }
    }
  }
}

// 7 divides the usual sizes of images (7, 14, 28, ...); tiles of 14 pixels need 32 registers.
template <int kWidth, int kStride>
void special_row(const DepthwiseRow& row) {
  if constexpr (kVectorsOf7 == 2) {
    if ((row.out_w + 13) / 14 * 14 - row.out_w < 7) {
      return special_row<kWidth, kStride, 14, 1>(row);
    }
  }
  return special_row<kWidth, kStride, 7, kVectorsOf7>(row);
}

void depthwise_row(const DepthwiseRow& row) {
  constexpr auto kLanes = static_cast<std::int64_t>(hn::MaxLanes(hn::ScalableTag<float>()));
  if (row.channels >= kLanes && row.dilation == 1) {
    const std::int64_t window =
        row.kernel_w < 10 && row.stride < 10 ? row.kernel_w * 10 + row.stride : 0;
    if (window == 51) return special_row<5, 1>(row);
    if (window == 52) return special_row<5, 2>(row);
    if (window == 71) return special_row<7, 1>(row);
  }
  if (row.channels >= kLanes) return general_row<hn::ScalableTag<float>>(row);
  if (row.channels >= 4 && kLanes >= 4) return general_row<hn::CappedTag<float, 4>>(row);
  general_row<hn::CappedTag<float, 1>>(row);
}

}  // namespace leadsman::ops::simd::HWY_NAMESPACE
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace leadsman::ops::simd {

HWY_EXPORT(depthwise_row);

void depthwise_row(const DepthwiseRow& row) {
  HWY_DYNAMIC_DISPATCH(depthwise_row)(row);
}

}  // namespace leadsman::ops::simd
#endif  // HWY_ONCE
