#include <algorithm>
#include <cmath>

#include "leadsman/error.h"
#include "leadsman/maps.h"
#include "observe/maps/canvas.h"

namespace leadsman {
namespace {

constexpr Colour kPaper{255, 255, 255};
constexpr Colour kInk{60, 60, 60};
constexpr std::int64_t kNumberHeight = 7;  // five dots and a margin

// Where the values of one channel lie in a logical activation.
struct ChannelLayout {
  std::int64_t channels = 0;
  std::int64_t height = 1;
  std::int64_t width = 1;
  std::int64_t first = 0;  // offset of channel 0, row 0, column 0
  std::int64_t channel_stride = 1;
  std::int64_t place_stride = 1;  // from one place to the next, row by row
};

ChannelLayout layout_of(const Shape& shape, std::int64_t n, const std::optional<TokenGrid>& grid) {
  ChannelLayout layout;
  switch (shape.rank()) {
    case 4:
      layout = {.channels = shape[1], .height = shape[2], .width = shape[3]};
      layout.channel_stride = shape[2] * shape[3];
      break;
    case 3: {
      const TokenGrid used = grid ? *grid : token_grid(shape[1], std::nullopt);
      if (used.prefix + used.height * used.width != shape[1]) {
        throw_usage("a grid of " + std::to_string(used.height) + " x " +
                    std::to_string(used.width) + " patches does not hold " +
                    std::to_string(shape[1]) + " tokens");
      }
      layout = {.channels = shape[2], .height = used.height, .width = used.width};
      layout.first = used.prefix * shape[2];
      layout.place_stride = shape[2];
      break;
    }
    case 2:
      layout.channels = shape[1];
      break;
    default:
      throw_usage("a tensor of shape " + shape.to_string() + " has no channels to draw");
  }
  layout.first += n * (shape.elements() / std::max<std::int64_t>(1, shape[0]));
  return layout;
}

double percentile_of_magnitudes(const Tensor& activation, double share) {
  std::vector<float> magnitudes;
  for (const float value : activation.values()) {
    if (std::isfinite(value)) magnitudes.push_back(std::abs(value));
  }
  if (magnitudes.empty()) return 0.0;
  const auto at = static_cast<std::ptrdiff_t>(share * static_cast<double>(magnitudes.size() - 1));
  std::nth_element(magnitudes.begin(), magnitudes.begin() + at, magnitudes.end());
  if (magnitudes[static_cast<std::size_t>(at)] > 0.0F) {
    return static_cast<double>(magnitudes[static_cast<std::size_t>(at)]);
  }
  return static_cast<double>(*std::ranges::max_element(magnitudes));
}

}  // namespace

TokenGrid token_grid(std::int64_t tokens, std::optional<PictureSize> patches) {
  if (patches && patches->height * patches->width <= tokens) {
    return {tokens - patches->height * patches->width, patches->height, patches->width};
  }
  const auto side = static_cast<std::int64_t>(std::sqrt(static_cast<double>(tokens)));
  return {tokens - side * side, side, side};
}

ChannelSheet channel_sheet(const Tensor& activation, std::int64_t n,
                           const std::optional<TokenGrid>& grid, std::int64_t max_channels) {
  const Shape& shape = activation.shape();
  if (shape.rank() < 2 || shape.elements() == 0) {
    throw_usage("a tensor of shape " + shape.to_string() + " has no channels to draw");
  }
  if (n < 0 || n >= shape[0]) throw_usage("there is no batch entry " + std::to_string(n));
  const ChannelLayout layout = layout_of(shape, n, grid);
  const std::int64_t channels = std::min(layout.channels, std::max<std::int64_t>(1, max_channels));

  const double full = percentile_of_magnitudes(activation, 0.995);
  const bool has_sign = std::ranges::any_of(activation.values(), [](float x) { return x < 0; });

  // Cells of about 48 pixels; large maps keep one pixel a place.
  const std::int64_t zoom = std::max<std::int64_t>(1, 48 / std::max(layout.height, layout.width));
  const std::int64_t cell_w = layout.width * zoom;
  const std::int64_t cell_h = layout.height * zoom;
  constexpr std::int64_t kGap = 4;
  const double aspect =
      static_cast<double>(cell_h + kGap + kNumberHeight) / static_cast<double>(cell_w + kGap);
  const auto columns = std::clamp<std::int64_t>(
      static_cast<std::int64_t>(std::ceil(std::sqrt(static_cast<double>(channels) * aspect * 1.5))),
      1, channels);
  const std::int64_t rows = (channels + columns - 1) / columns;

  ChannelSheet sheet{
      .picture = blank_picture(columns * (cell_w + kGap) + kGap,
                               rows * (cell_h + kNumberHeight + kGap) + kGap, kPaper),
      .full_scale = full,
      .columns = columns,
      .channels = channels};
  for (std::int64_t c = 0; c < channels; ++c) {
    const std::int64_t x = kGap + c % columns * (cell_w + kGap);
    const std::int64_t y = kGap + c / columns * (cell_h + kNumberHeight + kGap);
    draw_number(sheet.picture, x, y, c, 1, kInk);
    for (std::int64_t place = 0; place < layout.height * layout.width; ++place) {
      const float raw =
          activation.data()[layout.first + c * layout.channel_stride + place * layout.place_stride];
      const double value = full > 0.0 ? static_cast<double>(raw) / full : 0.0;
      fill_cell(sheet.picture, x + place % layout.width * zoom,
                y + kNumberHeight + place / layout.width * zoom, zoom, zoom,
                has_sign ? signed_colour(value) : rising_colour(value));
    }
  }
  return sheet;
}

}  // namespace leadsman
