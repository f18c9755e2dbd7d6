// One decoder a kind of file, and what they share.
#pragma once

#include <cstddef>
#include <cstdint>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "leadsman/error.h"
#include "leadsman/picture.h"

namespace leadsman::loaders {

/// The bytes of a picture file, which nobody has checked.
struct PictureSource {
  std::span<const std::byte> bytes;
  std::string_view name;
  const PictureLimits& limits;

  std::size_t size() const { return bytes.size(); }
  /// Requires offset < size().
  std::uint8_t at(std::size_t offset) const { return static_cast<std::uint8_t>(bytes[offset]); }
  /// Requires offset + 2 (or 4) <= size().
  std::uint32_t be16(std::size_t offset) const {
    return static_cast<std::uint32_t>(at(offset)) << 8 | at(offset + 1);
  }
  std::uint32_t be32(std::size_t offset) const { return be16(offset) << 16 | be16(offset + 2); }
  std::uint32_t le16(std::size_t offset) const {
    return static_cast<std::uint32_t>(at(offset + 1)) << 8 | at(offset);
  }
  std::uint32_t le32(std::size_t offset) const { return le16(offset + 2) << 16 | le16(offset); }
  bool starts_with(std::string_view magic, std::size_t offset = 0) const;

  [[noreturn]] void fail(const std::string& message) const {
    throw_input(std::string(name) + ": " + message);
  }
};

/// Checks sizes from a header against the limits and makes room: black, of the right size. After
/// it, width * height * 3 < 2^31.
Picture make_picture(const PictureSource& source, std::int64_t width, std::int64_t height);
/// The check alone.
void check_picture_size(const PictureSource& source, std::int64_t width, std::int64_t height);

struct DecodedPicture {
  Picture picture;
  /// EXIF data, starting at its TIFF header; empty when there is none.
  std::span<const std::byte> exif;
};

/// Require that the magic bytes are there. Throw Error(kInput) naming the source.
DecodedPicture decode_jpeg(const PictureSource& source);
DecodedPicture decode_png(const PictureSource& source);
DecodedPicture decode_bmp(const PictureSource& source);
DecodedPicture decode_pnm(const PictureSource& source);

/// Tag 0x0112 of the first directory: 1..8, or 1 when there is none or the data do not parse.
/// Follows no other offset, so nothing can loop.
int exif_orientation(std::span<const std::byte> tiff);
/// Turns and mirrors so that a picture stored with this orientation (1..8) stands upright.
Picture turn_upright(Picture picture, int orientation);

}  // namespace leadsman::loaders
