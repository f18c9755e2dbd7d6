#include "ops/simd/matrix.h"

#include <algorithm>
#include <array>
#include <cstddef>
#include <limits>
#include <utility>

#include "ops/simd/activation.h"
#include "ops/simd/pack.h"
#include "ops/simd/unroll.h"
#include "ops/simd/wanted_targets.h"

// Loops over a register tile must be unrolled in full: one index known only at run time would
// spill the whole tile.
#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "ops/simd/matrix.cc"
#include "hwy/foreach_target.h"
#include "hwy/highway.h"
#include "ops/simd/activation-inl.h"
#include "ops/simd/math-inl.h"

HWY_BEFORE_NAMESPACE();
namespace leadsman::ops::simd::HWY_NAMESPACE {

using D = hn::CappedTag<float, 16>;
using V = hn::Vec<D>;
constexpr int kLanes = static_cast<int>(hn::MaxLanes(D()));
constexpr int kPanelVectors = static_cast<int>(kPanel) / kLanes;

// The register tile: rows x vectors accumulators, one row of b and one value of a beside them.
// Where few rows are left, more columns keep the multipliers busy.
// Three vectors that end a product are one tile of kRowsOfThree rows, where that is not 0.
#if HWY_TARGET == HWY_AVX3  // 32 registers of 16
constexpr int kMaxRows = 14;
constexpr int kRowsOfThree = 0;
constexpr int wide(int rows) {
  return rows <= 3 ? 4 : 2;
}
#elif HWY_TARGET == HWY_AVX2  // 16 of 8
constexpr int kMaxRows = 6;
constexpr int kRowsOfThree = 4;
constexpr int wide(int rows) {
  return rows == 1 ? 8 : rows == 2 ? 4 : 2;
}
#elif HWY_TARGET == HWY_NEON  // 32 of 4
constexpr int kMaxRows = 6;
constexpr int kRowsOfThree = 0;
constexpr int wide(int rows) {
  return rows <= 2 ? 8 : 4;
}
#else                         // 16 of 4, or none at all
constexpr int kMaxRows = 4;
constexpr int kRowsOfThree = 0;
constexpr int wide(int rows) {
  return rows == 1 ? 4 : 2;
}
#endif

constexpr int kMaxWidth = wide(1);

struct Tile {
  const float* const* table;
  std::int64_t table_stride;
  std::int64_t taps;
  std::int64_t depth;
  const float* b;
  std::int64_t panel_stride;
  const float* bias;
  float* c;
  std::int64_t c_stride;
  const float* residual;
  std::int64_t residual_stride;
  std::int64_t cols;  // valid ones, counted from the tile's first
  float low;
  float high;
  const char* prefetch;        // this tile's share of the next columns' panels
  std::int64_t prefetch_step;  // bytes for each kUnroll steps of k
};

constexpr int kUnroll = 4;

// One step of the sum: one row of b against one value of each row of a.
template <int kRows, int kVectors>
HWY_INLINE void step(const float* const (&a)[kRows], std::int64_t k, const float* b,
                     std::int64_t panel_stride, V (&sum)[kRows][kVectors]) {
  const D d;
  V row[kVectors];
  LEADSMAN_UNROLL
  for (int v = 0; v < kVectors; ++v) {
    row[v] = hn::LoadU(d, b + v / kPanelVectors * panel_stride + v % kPanelVectors * kLanes);
  }
  LEADSMAN_UNROLL
  for (int r = 0; r < kRows; ++r) {
    const V value = hn::Set(d, a[r][k]);
    LEADSMAN_UNROLL
    for (int v = 0; v < kVectors; ++v) sum[r][v] = hn::MulAdd(value, row[v], sum[r][v]);
  }
}

// Stores the tile when its last vector is only partly valid, or finishes none of it in registers.
HWY_NOINLINE void store_part(const float* values, const float* residual, float* c,
                             std::int64_t count, float low, float high) {
  for (std::int64_t i = 0; i < count; ++i) {
    float value = residual == nullptr ? values[i] : values[i] + residual[i];
    if (value < low) value = low;
    if (value > high) value = high;
    c[i] = value;
  }
}

// `count` values of each row of `stage` to where they belong.
HWY_INLINE void store_rows(const float* stage, std::int64_t stage_stride, float* c,
                           std::int64_t c_stride, std::int64_t rows, std::int64_t count) {
  const D d;
  for (std::int64_t r = 0; r < rows; ++r) {
    std::int64_t i = 0;
    for (; i + kLanes <= count; i += kLanes) hn::StoreU(hn::Load(d, stage + i), d, c + i);
    for (; i < count; ++i) c[i] = stage[i];
    stage += stage_stride;
    c += c_stride;
  }
}

template <int kRows, int kVectors>
void run_tile(const Tile& t) {
  const D d;
  V sum[kRows][kVectors];
  LEADSMAN_UNROLL
  for (int v = 0; v < kVectors; ++v) {
    const V bias = hn::LoadU(d, t.bias + v * kLanes);
    LEADSMAN_UNROLL
    for (int r = 0; r < kRows; ++r) sum[r][v] = bias;
  }
  const float* b = t.b;
  const char* prefetch = t.prefetch;
  for (std::int64_t tap = 0; tap < t.taps; ++tap) {
    const float* a[kRows];
    LEADSMAN_UNROLL
    for (int r = 0; r < kRows; ++r) a[r] = t.table[tap * t.table_stride + r];
    std::int64_t k = 0;
    for (; k + kUnroll <= t.depth; k += kUnroll) {
      for (std::int64_t line = 0; line < t.prefetch_step; line += 64) {
        __builtin_prefetch(prefetch + line, 0, 2);
      }
      prefetch += t.prefetch_step;
      LEADSMAN_UNROLL
      for (int u = 0; u < kUnroll; ++u) {
        step<kRows, kVectors>(a, k + u, b + u * kPanel, t.panel_stride, sum);
      }
      b += kUnroll * kPanel;
    }
    for (; k < t.depth; ++k) {
      step<kRows, kVectors>(a, k, b, t.panel_stride, sum);
      b += kPanel;
    }
  }
  const V low = hn::Set(d, t.low);
  const V high = hn::Set(d, t.high);
  LEADSMAN_UNROLL
  for (int v = 0; v < kVectors; ++v) {
    LEADSMAN_UNROLL
    for (int r = 0; r < kRows; ++r) {
      float* c = t.c + r * t.c_stride + v * kLanes;
      const float* residual =
          t.residual == nullptr ? nullptr : t.residual + r * t.residual_stride + v * kLanes;
      V value = sum[r][v];
      if (HWY_LIKELY((v + 1) * kLanes <= t.cols)) {
        if (residual != nullptr) value = hn::Add(value, hn::LoadU(d, residual));
        value = at_most(d, at_least(d, value, low), high);
        hn::StoreU(value, d, c);
      } else if (v * kLanes < t.cols) {
        HWY_ALIGN float buffer[kLanes];
        hn::Store(value, d, buffer);
        store_part(buffer, residual, c, t.cols - v * kLanes, t.low, t.high);
      }
    }
  }
}

using RunTile = void (*)(const Tile&);

// Tiles of 1, 2, 4, 8 and 3 vectors.
constexpr std::size_t kWidths = 5;
constexpr std::size_t slot(std::int64_t vectors) {
  return vectors == 3 ? 4 : vectors == 8 ? 3 : static_cast<std::size_t>(vectors / 2);
}

// By slot(); null where the tile would not fit in registers.
template <int kRows>
constexpr std::array<RunTile, kWidths> tiles_of_rows() {
  std::array<RunTile, kWidths> tiles{};
  tiles[slot(1)] = run_tile<kRows, 1>;
  tiles[slot(2)] = run_tile<kRows, 2>;
  if constexpr (wide(kRows) >= 4) tiles[slot(4)] = run_tile<kRows, 4>;
  if constexpr (wide(kRows) >= 8) tiles[slot(8)] = run_tile<kRows, 8>;
  if constexpr (kRows <= kRowsOfThree) tiles[slot(3)] = run_tile<kRows, 3>;
  return tiles;
}

template <int... kIndex>
constexpr std::array<std::array<RunTile, kWidths>, sizeof...(kIndex)> all_tiles(
    std::integer_sequence<int, kIndex...>) {
  return {tiles_of_rows<kIndex + 1>()...};
}

constexpr auto kTiles = all_tiles(std::make_integer_sequence<int, kMaxRows>());

void matrix_product(const MatrixCall& call) {
  if (call.rows == 0 || call.cols == 0) return;
  const auto bounds = activation_bounds(call.activation);
  const ActivateBlock activate = bounds ? nullptr : block_activation(call.activation.kind);
  constexpr float kInfinity = std::numeric_limits<float>::infinity();
  const std::int64_t depth = call.taps * call.depth;
  const std::int64_t panel_stride = depth * kPanel;
  const auto row_tiles_of = [&](std::int64_t most) { return (call.rows + most - 1) / most; };
  const std::int64_t most_tiles = row_tiles_of(kMaxRows);
  const int tallest = static_cast<int>((call.rows + most_tiles - 1) / most_tiles);
  const std::int64_t vectors = (call.cols + kLanes - 1) / kLanes;

  Tile tile{.table = nullptr,
            .table_stride = call.table_stride,
            .taps = call.taps,
            .depth = call.depth,
            .b = nullptr,
            .panel_stride = panel_stride,
            .bias = nullptr,
            .c = nullptr,
            .c_stride = call.c_stride,
            .residual = nullptr,
            .residual_stride = call.c_stride,
            .cols = 0,
            .low = bounds ? bounds->low : -kInfinity,
            .high = bounds ? bounds->high : kInfinity,
            .prefetch = nullptr,
            .prefetch_step = 0};
  // What is to be activated waits here: side by side, many values are in flight at once.
  HWY_ALIGN float stage[kMaxRows * kMaxWidth * kLanes] = {};
  std::int64_t width = 0;
  for (std::int64_t first = 0; first < vectors; first += width) {
    width = wide(tallest);
    while (width > vectors - first) width /= 2;
    const bool three = kRowsOfThree > 0 && width == 2 && vectors - first == 3;
    if (three) width = 3;
    const std::int64_t row_tiles = three ? row_tiles_of(kRowsOfThree) : most_tiles;
    const std::int64_t column = first * kLanes;
    tile.b = call.panels + column / kPanel * panel_stride + column % kPanel;
    tile.bias = call.bias + column;
    tile.cols = call.cols - column;
    tile.c_stride = activate == nullptr ? call.c_stride : width * kLanes;
    // The panels of the columns that follow are fetched meanwhile, spread over this column's tiles.
    const std::int64_t next = column + width * kLanes;
    const float* ahead =
        next < call.cols ? call.panels + next / kPanel * panel_stride : call.next_panels;
    const std::int64_t blocks = row_tiles * call.taps * (call.depth / kUnroll);
    const std::int64_t ahead_bytes =
        width * kLanes * depth * static_cast<std::int64_t>(sizeof(float));
    const bool whole = next >= call.cols || next % kPanel == 0;
    const bool fetches = ahead != nullptr && blocks > 0 && whole;
    tile.prefetch_step = fetches ? (ahead_bytes + blocks - 1) / blocks : 0;

    for (std::int64_t i = 0; i < row_tiles; ++i) {
      const std::int64_t row = i * call.rows / row_tiles;
      const auto rows = static_cast<std::size_t>((i + 1) * call.rows / row_tiles - row);
      const float* pointers[kMaxRows];
      if (call.table == nullptr) {
        for (std::size_t r = 0; r < rows; ++r) {
          pointers[r] = call.a + (row + static_cast<std::int64_t>(r)) * call.a_stride;
        }
        tile.table = pointers;
      } else {
        tile.table = call.table + row;
      }
      float* const c = call.c + row * call.c_stride + column;
      tile.c = activate == nullptr ? c : stage;
      tile.residual =
          call.residual == nullptr ? nullptr : call.residual + row * call.c_stride + column;
      tile.prefetch = reinterpret_cast<const char*>(ahead) +
                      i * call.taps * (call.depth / kUnroll) * tile.prefetch_step;
      kTiles[rows - 1][slot(width)](tile);
      if (activate != nullptr) {
        const auto count = static_cast<std::int64_t>(rows);
        activate({stage, 0, stage, 0, 1, count * tile.c_stride, call.activation.parameter});
        store_rows(stage, tile.c_stride, c, call.c_stride, count,
                   std::min(tile.cols, tile.c_stride));
      }
    }
  }
}

}  // namespace leadsman::ops::simd::HWY_NAMESPACE
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace leadsman::ops::simd {

HWY_EXPORT(matrix_product);

void matrix_product(const MatrixCall& call) {
  HWY_DYNAMIC_DISPATCH(matrix_product)(call);
}

MatrixTasks::MatrixTasks(std::int64_t rows, std::int64_t depth, std::int64_t cols) {
  // A task of about a million multiply-adds is a few tens of microseconds: long beside the cost of
  // handing it out, short beside the whole.
  constexpr std::int64_t kTaskMacs = 1 << 20;
  constexpr std::int64_t kStripRows = 168;  // a multiple of every register tile's rows
  constexpr std::int64_t kFewRows = 400;
  const std::int64_t panels = panel_count(cols);
  strips = rows < kFewRows ? 1 : (rows + kStripRows - 1) / kStripRows;
  strip_rows = std::max<std::int64_t>(1, (rows + strips - 1) / std::max<std::int64_t>(1, strips));
  // Groups of 8, 4 or 2 panels: two are what the widest register tile takes at once.
  group_panels = 8;
  const auto group_macs = [&] { return strip_rows * depth * group_panels * kPanel; };
  while (group_panels > 2 && strips * ((panels + group_panels - 1) / group_panels) < 16 &&
         group_macs() > kTaskMacs) {
    group_panels /= 2;
  }
  groups = (panels + group_panels - 1) / group_panels;
}

const float* next_panels(const MatrixTasks& tasks, std::int64_t task, int threads,
                         const float* panels, std::int64_t depth) {
  const std::int64_t next = task + threads;
  if (tasks.groups == 1 || next >= tasks.count()) return nullptr;
  return panels + next % tasks.groups * tasks.group_panels * depth * kPanel;
}

}  // namespace leadsman::ops::simd
#endif  // HWY_ONCE
