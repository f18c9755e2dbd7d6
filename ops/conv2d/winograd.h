// Minimal filtering (Winograd 1980) as Lavin & Gray (2016) use it: a tile of m x m outputs of a 3x3
// convolution from (m+2)^2 products instead of 9 m^2.
//
//   Y = A^T [ (G g G^T) * (B^T d B) ] A      * element by element, summed over input channels
//
// d is an input tile of (m+2) x (m+2) pixels, g a filter. The matrices follow from the points where
// the polynomials are evaluated (Toom-Cook): 0, 1, -1 and infinity for m = 2; for m = 4 the points
// 0, +-3/4, +-3/2 and infinity in place of the usual 0, +-1, +-2: small powers of both and of their
// inverses keep rounding errors down (the effect is Barabasz et al. 2020, ACM TOMS 46(4);
// winograd_growth() below tells these 1.7 times a direct sum's from 3.6 times with the usual ones).
#pragma once

#include <array>
#include <cstddef>

namespace leadsman::ops {

template <std::size_t kRows, std::size_t kCols>
using Matrix = std::array<std::array<double, kCols>, kRows>;

/// The three matrices of F(m x m, 3 x 3); Winograd<2> and Winograd<4> exist.
template <std::size_t kOutput>
struct Winograd;

template <>
struct Winograd<2> {
  static constexpr std::size_t kTile = 4;
  static constexpr Matrix<4, 4> kInput{{{1, 0, -1, 0}, {0, 1, 1, 0}, {0, -1, 1, 0}, {0, 1, 0, -1}}};
  static constexpr Matrix<4, 3> kFilter{{{1, 0, 0}, {.5, .5, .5}, {.5, -.5, .5}, {0, 0, 1}}};
  static constexpr Matrix<2, 4> kOutputs{{{1, 1, 1, 0}, {0, 1, -1, -1}}};
};

template <>
struct Winograd<4> {
  static constexpr std::size_t kTile = 6;
  static constexpr double kNear = 0.75;  ///< the points, beside 0 and infinity, with either sign
  static constexpr double kFar = 1.5;
  static constexpr double kNear2 = kNear * kNear;
  static constexpr double kFar2 = kFar * kFar;
  static constexpr double kNorm0 = 1 / (kNear2 * kFar2);
  static constexpr double kNormNear = 1 / (2 * kNear2 * (kNear2 - kFar2));
  static constexpr double kNormFar = 1 / (2 * kFar2 * (kFar2 - kNear2));

  static constexpr Matrix<6, 6> kInput{{
      {kNear2 * kFar2, 0, -(kNear2 + kFar2), 0, 1, 0},
      {0, -kNear* kFar2, -kFar2, kNear, 1, 0},
      {0, kNear* kFar2, -kFar2, -kNear, 1, 0},
      {0, -kFar* kNear2, -kNear2, kFar, 1, 0},
      {0, kFar* kNear2, -kNear2, -kFar, 1, 0},
      {0, kNear2* kFar2, 0, -(kNear2 + kFar2), 0, 1},
  }};
  static constexpr Matrix<6, 3> kFilter{{
      {kNorm0, 0, 0},
      {kNormNear, kNear* kNormNear, kNear2* kNormNear},
      {kNormNear, -kNear* kNormNear, kNear2* kNormNear},
      {kNormFar, kFar* kNormFar, kFar2* kNormFar},
      {kNormFar, -kFar* kNormFar, kFar2* kNormFar},
      {0, 0, 1},
  }};
  static constexpr Matrix<4, 6> kOutputs{{
      {1, 1, 1, 1, 1, 0},
      {0, kNear, -kNear, kFar, -kFar, 0},
      {0, kNear2, kNear2, kFar2, kFar2, 0},
      {0, kNear* kNear2, -kNear* kNear2, kFar* kFar2, -kFar* kFar2, 1},
  }};
};

/// By how much the rounding errors of the products' sums exceed those of direct sums, as root mean
/// squares. For independent data of variance 1, sum p of C products has variance C |G_p|^2 |B_p|^2
/// (row norms, squared) and an error of sqrt(C) units in its size; A adds the sums' errors up. A
/// direct sum of 9 C products has an error of sqrt(9 C) units in sqrt(9 C). In two dimensions the
/// figure of one is squared.
template <std::size_t kOutput>
constexpr double winograd_growth() {
  using W = Winograd<kOutput>;
  const auto square_norm = [](const auto& row) {
    double sum = 0.0;
    for (const double value : row) sum += value * value;
    return sum;
  };
  double mean = 0.0;
  for (const auto& row : W::kOutputs) {
    for (std::size_t p = 0; p < W::kTile; ++p) {
      mean += row[p] * row[p] * square_norm(W::kFilter[p]) * square_norm(W::kInput[p]) / kOutput;
    }
  }
  return mean / 9;  // (sqrt(mean / 3))^2 / 3
}

}  // namespace leadsman::ops
