// Weights in panels of 16 output channels, the one packed layout for every CPU.
//
// Panel p holds output channels 16p .. 16p+15, the index of the sum outermost: value (k, o) of
// the panel is at k * 16 + o. 16 floats are one AVX-512, two AVX2 or four NEON registers. Output
// channels beyond the last are zero.
#pragma once

#include <cstdint>

#include "ops/simd/aligned.h"

namespace leadsman::ops::simd {

inline constexpr std::int64_t kPanel = 16;

constexpr std::int64_t panel_count(std::int64_t out_channels) {
  return (out_channels + kPanel - 1) / kPanel;
}

/// Packs weights [out, channels, taps]; the sum runs over taps first, then channels, so k =
/// tap * channels + c. `panels` takes panel_count(out) * taps * channels * 16 floats.
void pack_panels(const float* weights, std::int64_t out, std::int64_t channels, std::int64_t taps,
                 float* panels);

/// Panels and bias of one matrix product. The bias is as long as the panels are wide, zero where
/// there is none.
class PackedMatrix {
 public:
  PackedMatrix() = default;
  /// `bias` may be null.
  PackedMatrix(const float* weights, const float* bias, std::int64_t out, std::int64_t channels,
               std::int64_t taps);
  const float* panels() const { return panels_.data(); }
  const float* bias() const { return bias_.data(); }
  std::size_t bytes() const { return panels_.bytes() + bias_.bytes(); }

 private:
  AlignedFloats panels_;
  AlignedFloats bias_;
};

}  // namespace leadsman::ops::simd
