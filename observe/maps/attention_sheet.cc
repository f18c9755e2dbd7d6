#include <algorithm>
#include <cmath>

#include "leadsman/error.h"
#include "leadsman/maps.h"
#include "observe/maps/canvas.h"

namespace leadsman {
namespace {

constexpr Colour kPaper{255, 255, 255};
constexpr Colour kInk{60, 60, 60};

// Grey where no attention goes, the picture's own colours under full attention.
Colour lit(const std::uint8_t* rgb, double attention) {
  const double grey = 0.299 * rgb[0] + 0.587 * rgb[1] + 0.114 * rgb[2];
  const double dim = 0.28 * grey;
  Colour colour{};
  for (std::size_t i = 0; i < 3; ++i) {
    const double bright = std::min(255.0, 1.1 * rgb[i] + 12.0);
    colour[i] = static_cast<std::uint8_t>(std::lround(dim + attention * (bright - dim)));
  }
  return colour;
}

void draw_tile(Picture& sheet, std::int64_t left, std::int64_t top, std::int64_t zoom,
               const Picture& picture, const TokenGrid& grid, const std::vector<double>& weights) {
  const double largest = std::max(*std::ranges::max_element(weights), 1e-30);
  for (std::int64_t y = 0; y < picture.height; ++y) {
    for (std::int64_t x = 0; x < picture.width; ++x) {
      const std::int64_t patch =
          y * grid.height / picture.height * grid.width + x * grid.width / picture.width;
      const double attention = weights[static_cast<std::size_t>(patch)] / largest;
      fill_cell(sheet, left + x * zoom, top + y * zoom, zoom, zoom,
                lit(&picture.rgb[static_cast<std::size_t>((y * picture.width + x) * 3)],
                    std::clamp(attention, 0.0, 1.0)));
    }
  }
}

}  // namespace

Picture attention_sheet(const Tensor& weights, std::int64_t n, std::int64_t query,
                        const TokenGrid& grid, const Picture& picture) {
  const Shape& shape = weights.shape();
  const std::int64_t patches = grid.height * grid.width;
  if (shape.rank() != 4 || shape[3] != grid.prefix + patches || patches < 1) {
    throw_usage("attention weights of shape " + shape.to_string() + " do not fit a grid of " +
                std::to_string(grid.height) + " x " + std::to_string(grid.width) + " patches");
  }
  if (n < 0 || n >= shape[0]) throw_usage("there is no batch entry " + std::to_string(n));
  if (query < 0 || query >= shape[2]) {
    throw_usage("there is no token " + std::to_string(query) + " among " +
                std::to_string(shape[2]));
  }
  if (picture.width < 1 || picture.height < 1) throw_usage("an empty picture");

  const std::int64_t heads = shape[1];
  const std::int64_t zoom =
      std::max<std::int64_t>(1, 192 / std::max(picture.width, picture.height));
  constexpr std::int64_t kGap = 8;
  constexpr std::int64_t kTitle = 14;
  const std::int64_t tile_w = picture.width * zoom;
  const std::int64_t tile_h = picture.height * zoom;
  const std::int64_t tiles = heads + 1;
  const auto columns = std::min<std::int64_t>(
      tiles, static_cast<std::int64_t>(std::ceil(std::sqrt(1.6 * static_cast<double>(tiles)))));
  const std::int64_t rows = (tiles + columns - 1) / columns;
  Picture sheet = blank_picture(columns * (tile_w + kGap) + kGap,
                                rows * (tile_h + kTitle + kGap) + kGap, kPaper);

  std::vector<double> mean(static_cast<std::size_t>(patches), 0.0);
  for (std::int64_t tile = 0; tile < tiles; ++tile) {
    const std::int64_t x = kGap + tile % columns * (tile_w + kGap);
    const std::int64_t y = kGap + tile / columns * (tile_h + kTitle + kGap);
    if (tile == heads) {  // the mean: no number, a bar over its whole width
      fill_cell(sheet, x, y + 4, tile_w, 3, kInk);
      draw_tile(sheet, x, y + kTitle, zoom, picture, grid, mean);
      break;
    }
    draw_number(sheet, x, y, tile, 2, kInk);
    const float* row =
        weights.data() + ((n * heads + tile) * shape[2] + query) * shape[3] + grid.prefix;
    std::vector<double> own(row, row + patches);
    for (std::size_t i = 0; i < own.size(); ++i) mean[i] += own[i] / static_cast<double>(heads);
    draw_tile(sheet, x, y + kTitle, zoom, picture, grid, own);
  }
  return sheet;
}

}  // namespace leadsman
