// Drawing for the maps: filled cells, colour ramps and small numbers.
#pragma once

#include <array>
#include <cstdint>

#include "leadsman/picture.h"

namespace leadsman {

using Colour = std::array<std::uint8_t, 3>;

/// 0 (ink) to 1 (sand), lightness rising throughout, so that it survives grey printing.
Colour rising_colour(double value);
/// -1 (blue) over 0 (paper) to 1 (rust): told apart with any of the common colour blindnesses.
Colour signed_colour(double value);

Picture blank_picture(std::int64_t width, std::int64_t height, Colour colour);
/// Clipped at the borders.
void fill_cell(Picture& picture, std::int64_t x, std::int64_t y, std::int64_t width,
               std::int64_t height, Colour colour);
/// Decimal digits, 3 x 5 dots each of `dot` pixels; returns the width used.
std::int64_t draw_number(Picture& picture, std::int64_t x, std::int64_t y, std::int64_t number,
                         std::int64_t dot, Colour colour);

}  // namespace leadsman
