// The transformed filters of a Winograd convolution, in the order in which the products read them.
#pragma once

#include <algorithm>

#include "ops/operator.h"
#include "ops/simd/aligned.h"
#include "ops/simd/pack.h"

namespace leadsman::ops {

/// G g G^T for each output and input channel (winograd.h), computed in double and rounded once.
/// Output channels are cut into groups of panels; each position of a group is one packed matrix
/// (ops/simd/pack.h), positions and then groups follow each other in memory.
class WinogradWeights {
 public:
  /// `tile` is 2 or 4. The context is a 3x3 convolution's.
  WinogradWeights(const OpContext& context, int tile);

  std::int64_t groups() const { return groups_; }
  /// Where a group begins. Groups are of nearly the same size, so that none has fewer than a
  /// panel's channels when there are that many in all.
  std::int64_t first_column(std::int64_t group) const { return first_panel(group) * simd::kPanel; }
  /// Output channels of one group.
  std::int64_t columns(std::int64_t group) const {
    return std::min(first_column(group + 1), out_c_) - first_column(group);
  }
  /// The most that a group has, in whole panels.
  std::int64_t group_columns() const { return (panels_ + groups_ - 1) / groups_ * simd::kPanel; }
  /// Output channels, rounded up to whole panels.
  std::int64_t out_columns() const { return panels_ * simd::kPanel; }

  const float* at(std::int64_t group, std::int64_t position) const {
    return packed_.data() + offset(group, position);
  }
  /// What follows in memory; the first after the last.
  const float* next(std::int64_t group, std::int64_t position) const {
    if (position + 1 < positions_) return at(group, position + 1);
    return group + 1 < groups_ ? at(group + 1, 0) : at(0, 0);
  }
  const float* bias() const { return bias_.data(); }
  std::size_t bytes() const { return packed_.bytes() + bias_.bytes(); }

 private:
  static constexpr std::int64_t kGroupPanels = 8;
  std::int64_t first_panel(std::int64_t group) const { return group * panels_ / groups_; }
  std::int64_t panel_floats() const { return channels_ * simd::kPanel; }
  std::int64_t offset(std::int64_t group, std::int64_t position) const {
    const std::int64_t first = first_panel(group);
    return (first * positions_ + (first_panel(group + 1) - first) * position) * panel_floats();
  }

  std::int64_t channels_;
  std::int64_t out_c_;
  std::int64_t panels_;
  std::int64_t groups_;
  std::int64_t positions_;
  simd::AlignedFloats packed_;
  simd::AlignedFloats bias_;
};

}  // namespace leadsman::ops
