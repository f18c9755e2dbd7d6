#include "ops/simd/pack.h"

#include <algorithm>

#include "core/threads.h"

namespace leadsman::ops::simd {

void pack_panels(const float* weights, std::int64_t out, std::int64_t channels, std::int64_t taps,
                 float* panels) {
  const std::int64_t depth = channels * taps;
  parallel_for(available_cpus(), panel_count(out), [&](std::int64_t panel, int) {
    float* to = panels + panel * depth * kPanel;
    const std::int64_t first = panel * kPanel;
    const std::int64_t width = std::min(kPanel, out - first);
    for (std::int64_t tap = 0; tap < taps; ++tap) {
      for (std::int64_t c = 0; c < channels; ++c) {
        const float* from = weights + first * depth + c * taps + tap;
        for (std::int64_t o = 0; o < width; ++o) to[o] = from[o * depth];
        std::fill(to + width, to + kPanel, 0.0F);
        to += kPanel;
      }
    }
  });
}

PackedMatrix::PackedMatrix(const float* weights, const float* bias, std::int64_t out,
                           std::int64_t channels, std::int64_t taps)
    : panels_(AlignedFloats::undefined(panel_count(out) * kPanel * channels * taps)),
      bias_(panel_count(out) * kPanel) {
  pack_panels(weights, out, channels, taps, panels_.data());
  if (bias != nullptr) std::copy_n(bias, out, bias_.data());
}

}  // namespace leadsman::ops::simd
