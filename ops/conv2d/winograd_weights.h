// The transformed filters of a Winograd convolution, in the order in which the products read them.
#pragma once

#include <algorithm>

#include "ops/operator.h"
#include "ops/simd/aligned.h"
#include "ops/simd/pack.h"

namespace leadsman::ops {

/// G g G^T for each output and input channel (winograd.h), computed in double and rounded once.
/// The output channels of each of the convolution's groups are cut into parts of whole panels;
/// each position of a part is one packed matrix (ops/simd/pack.h), positions and then parts follow
/// each other in memory.
class WinogradWeights {
 public:
  /// `tile` is 2 or 4. The context is a 3x3 convolution's.
  WinogradWeights(const OpContext& context, int tile);

  std::int64_t parts() const { return groups_ * cuts_; }
  /// Output channels of a part. Those of a group are of nearly the same size, so that none has
  /// fewer than a panel's channels when the group has that many.
  std::int64_t first_output(std::int64_t part) const {
    return part / cuts_ * group_out_ + part % cuts_ * group_panels_ / cuts_ * simd::kPanel;
  }
  std::int64_t columns(std::int64_t part) const {
    return first_output(part + 1) - first_output(part);
  }
  /// The most that a part has, in whole panels.
  std::int64_t part_columns() const { return (group_panels_ + cuts_ - 1) / cuts_ * simd::kPanel; }

  const float* at(std::int64_t part, std::int64_t position) const {
    return packed_.data() + offset(part, position);
  }
  /// What follows in memory; the first after the last.
  const float* next(std::int64_t part, std::int64_t position) const {
    if (position + 1 < positions_) return at(part, position + 1);
    return part + 1 < parts() ? at(part + 1, 0) : at(0, 0);
  }
  const float* bias() const { return bias_.data(); }
  std::size_t bytes() const { return packed_.bytes() + bias_.bytes(); }

 private:
  static constexpr std::int64_t kPartPanels = 8;
  std::int64_t first_panel(std::int64_t part) const {
    return part / cuts_ * group_panels_ + part % cuts_ * group_panels_ / cuts_;
  }
  std::int64_t panel_floats() const { return depth_ * simd::kPanel; }
  std::int64_t offset(std::int64_t part, std::int64_t position) const {
    const std::int64_t first = first_panel(part);
    return (first * positions_ + (first_panel(part + 1) - first) * position) * panel_floats();
  }

  std::int64_t groups_;
  std::int64_t depth_;
  std::int64_t group_out_;
  std::int64_t group_panels_;
  std::int64_t cuts_;  ///< parts of a group
  std::int64_t positions_;
  simd::AlignedFloats packed_;
  simd::AlignedFloats bias_;
};

}  // namespace leadsman::ops
