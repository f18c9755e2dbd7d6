#include "observe/maps/canvas.h"

#include <algorithm>
#include <cmath>
#include <span>
#include <string>

namespace leadsman {
namespace {

Colour blend(std::span<const Colour> stops, double position) {
  const double at = std::clamp(position, 0.0, 1.0) * static_cast<double>(stops.size() - 1);
  const auto low = std::min(static_cast<std::size_t>(at), stops.size() - 2);
  const double share = at - static_cast<double>(low);
  Colour colour{};
  for (std::size_t i = 0; i < 3; ++i) {
    const double value = (1.0 - share) * stops[low][i] + share * stops[low + 1][i];
    colour[i] = static_cast<std::uint8_t>(std::lround(value));
  }
  return colour;
}

// Rows of three dots, top to bottom, the left dot in the highest of three bits.
constexpr std::array<std::array<std::uint8_t, 5>, 10> kDigits{{
    {7, 5, 5, 5, 7},
    {2, 6, 2, 2, 7},
    {7, 1, 7, 4, 7},
    {7, 1, 3, 1, 7},
    {5, 5, 7, 1, 1},
    {7, 4, 7, 1, 7},
    {7, 4, 7, 5, 7},
    {7, 1, 2, 2, 2},
    {7, 5, 7, 5, 7},
    {7, 5, 7, 1, 7},
}};

}  // namespace

Colour rising_colour(double value) {
  static constexpr std::array<Colour, 5> stops{
      {{12, 20, 38}, {24, 66, 92}, {38, 124, 124}, {142, 180, 118}, {250, 232, 180}}};
  return blend(stops, std::isnan(value) ? 0.0 : value);
}

Colour signed_colour(double value) {
  static constexpr std::array<Colour, 5> stops{
      {{16, 58, 104}, {106, 152, 190}, {246, 243, 236}, {216, 142, 98}, {140, 48, 22}}};
  return blend(stops, std::isnan(value) ? 0.5 : 0.5 + 0.5 * value);
}

Picture blank_picture(std::int64_t width, std::int64_t height, Colour colour) {
  Picture picture{.width = width, .height = height, .rgb = {}};
  picture.rgb.resize(static_cast<std::size_t>(width * height * 3));
  fill_cell(picture, 0, 0, width, height, colour);
  return picture;
}

void fill_cell(Picture& picture, std::int64_t x, std::int64_t y, std::int64_t width,
               std::int64_t height, Colour colour) {
  const std::int64_t right = std::min(picture.width, x + width);
  const std::int64_t bottom = std::min(picture.height, y + height);
  for (std::int64_t row = std::max<std::int64_t>(0, y); row < bottom; ++row) {
    for (std::int64_t column = std::max<std::int64_t>(0, x); column < right; ++column) {
      std::ranges::copy(colour, picture.rgb.begin() + (row * picture.width + column) * 3);
    }
  }
}

std::int64_t draw_number(Picture& picture, std::int64_t x, std::int64_t y, std::int64_t number,
                         std::int64_t dot, Colour colour) {
  std::int64_t at = x;
  for (const char digit : std::to_string(number)) {
    if (digit < '0' || digit > '9') continue;
    const auto& rows = kDigits[static_cast<std::size_t>(digit - '0')];
    for (std::int64_t row = 0; row < 5; ++row) {
      for (std::int64_t column = 0; column < 3; ++column) {
        if ((rows[static_cast<std::size_t>(row)] >> (2 - column) & 1) == 0) continue;
        fill_cell(picture, at + column * dot, y + row * dot, dot, dot, colour);
      }
    }
    at += 4 * dot;
  }
  return at - x;
}

}  // namespace leadsman
