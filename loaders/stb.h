// The pieces of the stb libraries that are used: the entropy decoding of JPEG, and the writing of
// PNG.
//
// Callers check what comes from outside first: stb_image 2.27 trusts Huffman table sizes, tables
// that were never defined and scans that were never sent.
#pragma once

#include <cstddef>
#include <cstdint>
#include <memory>
#include <span>
#include <string>
#include <vector>

#include "leadsman/picture.h"

namespace leadsman::loaders {

/// The samples of one component, before upsampling and colour conversion.
struct JpegPlane {
  const std::uint8_t* samples = nullptr;
  std::int64_t stride = 0;
  std::int64_t width = 0;  ///< of the part that belongs to the picture
  std::int64_t height = 0;
  std::int64_t across = 1;  ///< pixels of the picture to a sample
  std::int64_t down = 1;
};

struct JpegPlanes {
  std::vector<JpegPlane> planes;
  std::shared_ptr<const void> owner;
};

/// Dequantized coefficients of a block, row by row, to 8x8 samples.
using InverseTransform = void (*)(std::uint8_t* out, int stride, short* coefficients);

/// `bytes` has passed the checks of picture_jpeg.cc. Returns an empty string, or what is wrong.
/// Throws std::bad_alloc.
std::string stb_decode_jpeg(std::span<const std::byte> bytes, InverseTransform transform,
                            JpegPlanes& result);

/// The bytes of a PNG file. Requires 0 < rgb.size() == width * height * 3 <= 2^30. Throws
/// std::bad_alloc.
std::vector<std::uint8_t> stb_encode_png(const Picture& picture);

}  // namespace leadsman::loaders
