// Pictures of what a layer computed.
#pragma once

#include <optional>

#include "leadsman/picture.h"
#include "leadsman/tensor.h"

namespace leadsman {

/// How tokens lie on the image: `prefix` tokens that stand for no place (a class token), then
/// height x width patches, row by row.
struct TokenGrid {
  std::int64_t prefix = 0;
  std::int64_t height = 0;
  std::int64_t width = 0;
};

/// The grid of `tokens` tokens over patches of the given grid; the most nearly square one when no
/// patch grid is known. Prefix: the tokens that are left over.
TokenGrid token_grid(std::int64_t tokens, std::optional<PictureSize> patches);

/// Every channel of one activation as a small numbered map, side by side. Non-negative values run
/// from dark to light, values of both signs from blue over white to rust, white being 0.
struct ChannelSheet {
  Picture picture;
  /// Colours end at this magnitude for all channels alike, so that they can be compared: the
  /// 99.5th percentile of all magnitudes. Larger ones look the same.
  double full_scale = 0.0;
  std::int64_t columns = 0;
  std::int64_t channels = 0;
};

/// `activation` is logical: [N, C, H, W], [N, T, C] (laid out by `grid`, prefix left out) or
/// [N, C]; `n` picks the batch entry. At most `max_channels` channels are drawn, the first ones.
/// Throws Error(kUsage) for another rank or n outside the batch.
ChannelSheet channel_sheet(const Tensor& activation, std::int64_t n,
                           const std::optional<TokenGrid>& grid, std::int64_t max_channels = 1024);

/// Attention of one query token, a tile for each head and last their mean, as light over `picture`
/// (what the model saw, after the crop). `weights` is logical [N, heads, T, S] with S = T laid out
/// by `grid`; `query` in [0, T). Each tile's brightest patch is that head's largest weight.
/// Throws Error(kUsage) when sizes do not fit.
Picture attention_sheet(const Tensor& weights, std::int64_t n, std::int64_t query,
                        const TokenGrid& grid, const Picture& picture);

}  // namespace leadsman
