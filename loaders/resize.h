// Pillow's resize of 8-bit pictures, whole or through a window.
#pragma once

#include "leadsman/picture.h"
#include "leadsman/preprocess.h"

namespace leadsman::loaders {

/// A part of the resized picture. Lies inside it and is not empty.
struct ResizeWindow {
  std::int64_t top = 0;
  std::int64_t left = 0;
  PictureSize size;
};

/// The window of resize(picture, size, interpolation), computed alone and equal to it byte for
/// byte. Requires a picture that is not empty and sizes of at least 1. Throws Error(kInput) when
/// the result or the rows in between are above 1 GiB.
Picture resize_window(const Picture& picture, const PictureSize& size, Interpolation interpolation,
                      const ResizeWindow& window);

}  // namespace leadsman::loaders
