// Multi-head attention within windows of an image (Liu et al. 2021), or on grids spread over it (Tu
// et al. 2022). The input's channels are q, k, v; each position attends to those of its window:
//
//   p = softmax over s of score(t, s) + bias[offset of s from t, h] - 100 where regions differ
//   score = scale * q_t k_s, or with `cosine` (Liu et al. 2022) q_t k_s / (|q_t| |k_s|);
//   times head_scale[h] where there is one.
//
// The map is padded at the bottom and the right to whole windows; q, k, v of the padding are the
// weight `padding` (a projection's bias), and its results are dropped. With a shift, windows begin
// `shift` positions further along each axis, wrap around, and the regions that this brings together
// are told apart by the -100. An axis that one window covers is not shifted. On a grid, positions
// of an attention are H / h rows and W / w columns apart.
#pragma once

#include <cstdint>
#include <vector>

#include "ops/operator.h"

namespace leadsman::ops {

/// The numbers of a layer, and where the positions of each window are.
struct WindowGeometry {
  std::int64_t n, c, height, width, heads, d;
  std::int64_t window_height, window_width, tokens;
  std::int64_t rows, columns;  ///< windows of a map
  std::int64_t shift_down, shift_right;
  bool grid;
  bool cosine;
  double scale;

  /// Throws Error(kInput) when input, attributes and weights do not meet.
  explicit WindowGeometry(const OpContext& context);

  std::int64_t windows() const { return rows * columns; }
  /// Index y * width + x of token `i` of a window; -1 in the padding.
  std::int64_t position(std::int64_t window, std::int64_t i) const;
  /// Tokens of different regions do not see each other.
  int region(std::int64_t window, std::int64_t i) const;
  /// Whether a window has more than one region.
  bool is_divided(std::int64_t window) const;
  /// Row of the table `position_bias` for a query and a key.
  std::int64_t bias_row(std::int64_t query, std::int64_t key) const;
  /// Factor of a head's scores: head_scale, times `scale` unless `cosine`.
  double head_factor(const OpContext& context, std::int64_t head) const;
};

/// [3C]: q, k and v of the padding.
std::vector<float> padding_row(const OpContext& context);

constexpr double kMaskedScore = -100.0;  ///< added between regions: Liu et al.'s own number
constexpr double kSmallestNorm = 1e-12;  ///< below it, cosine attention divides by this

const Operator& window_attention_operator();

const Strategy& window_attention_blocked();    ///< "blocked": simd/attention.h
const Strategy& window_attention_reference();  ///< "reference": plain loops in double

}  // namespace leadsman::ops
