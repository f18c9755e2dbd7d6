#include "ops/conv2d/winograd_weights.h"

#include "core/threads.h"
#include "ops/conv2d/winograd.h"

namespace leadsman::ops {
namespace {

constexpr std::size_t kPanel = simd::kPanel;
using Lanes = std::array<double, kPanel>;  // of a panel's output channels

// 3x3 filters of one input channel and one panel, to (m+2)^2 positions.
template <std::size_t kOutput>
void transform_filters(const std::array<Lanes, 9>& filters, float* out, std::int64_t out_stride) {
  constexpr auto& kFilter = Winograd<kOutput>::kFilter;
  constexpr std::size_t kSide = Winograd<kOutput>::kTile;
  std::array<std::array<Lanes, 3>, kSide> rows;  // G g
  for (std::size_t u = 0; u < kSide; ++u) {
    for (std::size_t v = 0; v < 3; ++v) {
      for (std::size_t o = 0; o < kPanel; ++o) {
        rows[u][v][o] = kFilter[u][0] * filters[v][o] + kFilter[u][1] * filters[3 + v][o] +
                        kFilter[u][2] * filters[6 + v][o];
      }
    }
  }
  for (std::size_t u = 0; u < kSide; ++u) {
    for (std::size_t v = 0; v < kSide; ++v) {
      for (std::size_t o = 0; o < kPanel; ++o) {
        out[o] = static_cast<float>(kFilter[v][0] * rows[u][0][o] + kFilter[v][1] * rows[u][1][o] +
                                    kFilter[v][2] * rows[u][2][o]);
      }
      out += out_stride;
    }
  }
}

}  // namespace

WinogradWeights::WinogradWeights(const OpContext& context, int tile)
    : groups_(context.attributes.integer("groups")),
      depth_(context.inputs[0][1] / groups_),
      group_out_(context.output[1] / groups_),
      group_panels_(simd::panel_count(group_out_)),
      cuts_((group_panels_ + kPartPanels - 1) / kPartPanels),
      positions_((tile + 2) * (tile + 2)),
      packed_(
          simd::AlignedFloats::undefined(groups_ * group_panels_ * positions_ * panel_floats())),
      bias_(context.output[1]) {
  if (const Tensor* bias = context.weight("bias")) {
    std::copy_n(bias->data(), context.output[1], bias_.data());
  }
  const float* weight = context.weight("weight")->data();
  parallel_for(available_cpus(), groups_ * group_panels_, [&](std::int64_t panel, int) {
    std::int64_t part = panel / group_panels_ * cuts_;
    while (first_panel(part + 1) <= panel) ++part;
    const std::int64_t panels = first_panel(part + 1) - first_panel(part);
    const std::int64_t in_group = panel % group_panels_ * simd::kPanel;
    const std::int64_t first = panel / group_panels_ * group_out_ + in_group;
    const std::int64_t valid = std::min(simd::kPanel, group_out_ - in_group);
    float* to = packed_.data() + offset(part, 0) + (panel - first_panel(part)) * panel_floats();
    std::array<Lanes, 9> filters{};
    for (std::int64_t c = 0; c < depth_; ++c, to += simd::kPanel) {
      for (std::int64_t o = 0; o < valid; ++o) {
        const float* filter = weight + ((first + o) * depth_ + c) * 9;
        for (std::size_t tap = 0; tap < 9; ++tap) {
          filters[tap][static_cast<std::size_t>(o)] = static_cast<double>(filter[tap]);
        }
      }
      if (tile == 2) {
        transform_filters<2>(filters, to, panels * panel_floats());
      } else {
        transform_filters<4>(filters, to, panels * panel_floats());
      }
    }
  });
}

}  // namespace leadsman::ops
