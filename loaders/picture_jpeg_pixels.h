// JPEG from coefficients to RGB, in libjpeg's arithmetic: results are equal to those of libjpeg
// with its default settings (the accurate integer transform, "fancy" upsampling), bit for bit.
#pragma once

#include <cstdint>

#include "leadsman/picture.h"
#include "loaders/stb.h"

namespace leadsman::loaders {

enum class JpegColours { kGrey, kYcc, kRgb, kCmyk, kYcck };

/// The 8x8 inverse cosine transform of Loeffler, Ligtenberg & Moschytz (1989) in 32-bit fixed
/// point, as in libjpeg's jidctint.c.
void jpeg_inverse_transform(std::uint8_t* out, int stride, short* coefficients);

/// Fills `picture`, whose sizes are those of the frame: components are upsampled to it and turned
/// into RGB, CMYK as Pillow does (picture.h).
void jpeg_planes_to_rgb(const JpegPlanes& planes, JpegColours colours, Picture& picture);

}  // namespace leadsman::loaders
