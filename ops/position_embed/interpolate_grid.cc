#include <algorithm>
#include <array>
#include <cmath>

#include "ops/cubic.h"
#include "ops/position_embed/position_embed.h"

namespace leadsman::ops {
namespace {

// Where one output position lies between four neighbours on an axis.
struct Taps {
  std::array<std::int64_t, 4> index;
  std::array<double, 4> weight;
};

std::vector<Taps> axis_taps(std::int64_t from, std::int64_t to) {
  std::vector<Taps> taps(static_cast<std::size_t>(to));
  for (std::int64_t i = 0; i < to; ++i) {
    const double place = to == 1 ? 0.0
                                 : static_cast<double>(i) * static_cast<double>(from - 1) /
                                       static_cast<double>(to - 1);
    const auto base = static_cast<std::int64_t>(std::floor(place));
    Taps& t = taps[static_cast<std::size_t>(i)];
    for (std::size_t k = 0; k < 4; ++k) {
      const std::int64_t neighbour = base - 1 + static_cast<std::int64_t>(k);
      t.index[k] = std::clamp<std::int64_t>(neighbour, 0, from - 1);
      t.weight[k] = keys_cubic(place - static_cast<double>(neighbour));
    }
  }
  return taps;
}

}  // namespace

std::vector<float> interpolate_grid(const float* grid, std::int64_t h, std::int64_t w,
                                    std::int64_t channels, std::int64_t to_h, std::int64_t to_w) {
  const std::vector<Taps> rows = axis_taps(h, to_h);
  const std::vector<Taps> columns = axis_taps(w, to_w);
  std::vector<float> result;
  result.reserve(static_cast<std::size_t>(Shape{to_h, to_w, channels}.elements()));
  std::vector<double> sums(static_cast<std::size_t>(channels));
  for (const Taps& row : rows) {
    for (const Taps& column : columns) {
      std::ranges::fill(sums, 0.0);
      for (std::size_t u = 0; u < 4; ++u) {
        for (std::size_t v = 0; v < 4; ++v) {
          const double weight = row.weight[u] * column.weight[v];
          const float* from = grid + (row.index[u] * w + column.index[v]) * channels;
          for (std::size_t c = 0; c < sums.size(); ++c) {
            sums[c] += weight * static_cast<double>(from[c]);
          }
        }
      }
      for (const double sum : sums) result.push_back(static_cast<float>(sum));
    }
  }
  return result;
}

}  // namespace leadsman::ops
