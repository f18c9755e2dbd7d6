#include "ops/simd/depthwise3.h"

#include <algorithm>
#include <limits>
#include <type_traits>
#include <utility>

#include "ops/simd/activation.h"
#include "ops/simd/unroll.h"
#include "ops/simd/wanted_targets.h"

#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "ops/simd/depthwise3.cc"
#include "hwy/foreach_target.h"
#include "hwy/highway.h"
#include "ops/simd/activation-inl.h"
#include "ops/simd/math-inl.h"

HWY_BEFORE_NAMESPACE();
namespace leadsman::ops::simd::HWY_NAMESPACE {

using D = hn::CappedTag<float, kMinDepthwise3Channels>;
using V = hn::Vec<D>;
constexpr auto kLanes = static_cast<std::int64_t>(hn::MaxLanes(D()));

// A tile is two output rows by four pixels, or three, of one vector of channels: eight sums, the
// six weights that one input row meets, and a value fit in 16 registers.
constexpr int kTileRows = 2;

// Which columns of a tile's input are outside the image.
enum class Edge { kNone, kFirst, kLast, kAny };

struct Tile {
  const Depthwise3& call;
  Bounds bounds;
  std::int64_t row;    // the first output row
  std::int64_t pixel;  // the first output column
};

// Input column kX of input row kLine meets every window of the tile that covers it.
template <int kStride, int kRows, int kPixels, int kLine, int kX>
HWY_INLINE void add_pixel(V value, const V (&weights)[3][3], V (&sums)[kRows][kPixels]) {
  LEADSMAN_UNROLL
  for (int r = 0; r < kRows; ++r) {
    const int u = kLine - r * kStride;
    LEADSMAN_UNROLL
    for (int v = 0; v < 3; ++v) {
      const int p = (kX - v) / kStride;
      if (u >= 0 && u < 3 && kX >= v && (kX - v) % kStride == 0 && p < kPixels) {
        V& sum = sums[r][std::min(p, kPixels - 1)];
        sum = hn::MulAdd(value, weights[std::clamp(u, 0, 2)][v], sum);
      }
    }
  }
}

// `x` is column 0 of the tile's input, `line` points there; pixels are `stride` floats apart.
template <int kStride, int kRows, int kPixels, Edge kEdge, int kLine, int... kX>
HWY_INLINE void add_line(const float* line, std::int64_t stride, std::int64_t x,
                         std::int64_t input_w, const V (&weights)[3][3], V (&sums)[kRows][kPixels],
                         std::integer_sequence<int, kX...>) {
  const D d;
  constexpr int kLast = static_cast<int>(sizeof...(kX)) - 1;
  const auto column = [&](auto index) HWY_ATTR {
    constexpr int kColumn = decltype(index)::value;
    if constexpr (kColumn == 0 && kEdge == Edge::kFirst) return;
    if constexpr (kColumn == kLast && kEdge == Edge::kLast) return;
    if (kEdge == Edge::kAny && (x + kColumn < 0 || x + kColumn >= input_w)) return;
    add_pixel<kStride, kRows, kPixels, kLine, kColumn>(hn::LoadU(d, line + kColumn * stride),
                                                       weights, sums);
  };
  (column(std::integral_constant<int, kX>()), ...);
}

template <int kStride, int kRows, int kPixels, Edge kEdge, int... kLine>
HWY_INLINE void run_vectors(const Tile& tile, std::integer_sequence<int, kLine...>) {
  const D d;
  // Copies: stores of floats cannot change them.
  const Depthwise3 call = tile.call;
  const std::int64_t x = call.first_x + tile.pixel * kStride;
  const float* lines[sizeof...(kLine)];
  ((lines[kLine] = call.lines[tile.row * kStride + kLine]), ...);
  const std::int64_t first_input = x * call.input_stride;
  const std::int64_t first = tile.row * call.out_row + tile.pixel * call.out_stride;
  float* const out = call.out + first;
  const float* const residual = call.residual == nullptr ? nullptr : call.residual + first;
  const V low = hn::Set(d, tile.bounds.low);
  const V high = hn::Set(d, tile.bounds.high);

  for (std::int64_t block = 0; block < call.channels; block += kLanes) {
    const std::int64_t c = std::min(block, call.channels - kLanes);
    V sums[kRows][kPixels];
    const V bias = hn::LoadU(d, call.bias + c);
    LEADSMAN_UNROLL
    for (int r = 0; r < kRows; ++r) {
      LEADSMAN_UNROLL
      for (int p = 0; p < kPixels; ++p) sums[r][p] = bias;
    }
    V weights[3][3];
    LEADSMAN_UNROLL
    for (int tap = 0; tap < 9; ++tap) {
      weights[tap / 3][tap % 3] = hn::LoadU(d, call.weights + tap * call.weight_stride + c);
    }
    const auto line = [&](auto index) HWY_ATTR {
      constexpr int kIndex = decltype(index)::value;
      if (lines[kIndex] == nullptr) return;
      add_line<kStride, kRows, kPixels, kEdge, kIndex>(
          lines[kIndex] + first_input + c, call.input_stride, x, call.input_w, weights, sums,
          std::make_integer_sequence<int, (kPixels - 1) * kStride + 3>());
    };
    (line(std::integral_constant<int, kLine>()), ...);
    if (residual != nullptr) {
      LEADSMAN_UNROLL
      for (int r = 0; r < kRows; ++r) {
        LEADSMAN_UNROLL
        for (int p = 0; p < kPixels; ++p) {
          const float* from = residual + r * call.out_row + p * call.out_stride + c;
          sums[r][p] = hn::Add(sums[r][p], hn::LoadU(d, from));
        }
      }
    }
    LEADSMAN_UNROLL
    for (int r = 0; r < kRows; ++r) {
      LEADSMAN_UNROLL
      for (int p = 0; p < kPixels; ++p) {
        hn::StoreU(at_most(d, at_least(d, sums[r][p], low), high), d,
                   out + r * call.out_row + p * call.out_stride + c);
      }
    }
  }
}

template <int kStride, int kRows, int kPixels, Edge kEdge>
void run_tile(const Tile& tile) {
  run_vectors<kStride, kRows, kPixels, kEdge>(
      tile, std::make_integer_sequence<int, (kRows - 1) * kStride + 3>());
}

template <int kStride, int kRows, int kPixels>
void run_tile(const Tile& tile) {
  constexpr int kColumns = (kPixels - 1) * kStride + 3;
  const std::int64_t x = tile.call.first_x + tile.pixel * kStride;
  const std::int64_t before = std::max<std::int64_t>(0, -x);
  const std::int64_t behind = std::max<std::int64_t>(0, x + kColumns - tile.call.input_w);
  if (before + behind == 0) return run_tile<kStride, kRows, kPixels, Edge::kNone>(tile);
  if constexpr (kRows == kTileRows) {  // single rows are rare: no copies for them
    if (before == 1 && behind == 0) return run_tile<kStride, kRows, kPixels, Edge::kFirst>(tile);
    if (before == 0 && behind == 1) return run_tile<kStride, kRows, kPixels, Edge::kLast>(tile);
  }
  run_tile<kStride, kRows, kPixels, Edge::kAny>(tile);
}

template <int kStride, int kRows>
void run_rows(Tile& tile) {
  const std::int64_t tiles = (tile.call.out_w + 3) / 4;
  for (std::int64_t i = 0; i < tiles; ++i) {
    tile.pixel = i * tile.call.out_w / tiles;
    if ((i + 1) * tile.call.out_w / tiles - tile.pixel == 4) {
      run_tile<kStride, kRows, 4>(tile);
    } else {
      run_tile<kStride, kRows, 3>(tile);
    }
  }
}

template <int kStride>
void strip(const Depthwise3& call) {
  constexpr float kInfinity = std::numeric_limits<float>::infinity();
  Tile tile{call, activation_bounds(call.activation).value_or(Bounds{-kInfinity, kInfinity}), 0, 0};
  for (; tile.row + kTileRows <= call.rows; tile.row += kTileRows) {
    run_rows<kStride, kTileRows>(tile);
  }
  for (; tile.row < call.rows; ++tile.row) run_rows<kStride, 1>(tile);
}

void depthwise3(const Depthwise3& call) {
  call.stride == 1 ? strip<1>(call) : strip<2>(call);
  if (activation_bounds(call.activation)) return;
  const ActivateBlock activate = block_activation(call.activation.kind);
  for (std::int64_t row = 0; row < call.rows; ++row) {
    float* out = call.out + row * call.out_row;
    activate({out, call.out_stride, out, call.out_stride, call.out_w, call.channels,
              call.activation.parameter});
  }
}

}  // namespace leadsman::ops::simd::HWY_NAMESPACE
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace leadsman::ops::simd {

HWY_EXPORT(depthwise3);

void depthwise3(const Depthwise3& call) {
  HWY_DYNAMIC_DISPATCH(depthwise3)(call);
}

}  // namespace leadsman::ops::simd
#endif  // HWY_ONCE
