#include <utility>

#include "loaders/picture_formats.h"

namespace leadsman::loaders {
namespace {

// Numbers in either byte order, as TIFF 6.0 wants.
class TiffReader {
 public:
  TiffReader(std::span<const std::byte> bytes, bool big_endian)
      : bytes_(bytes), big_endian_(big_endian) {}

  bool holds(std::uint64_t offset, std::uint64_t count) const {
    return offset <= bytes_.size() && count <= bytes_.size() - offset;
  }
  std::uint32_t u16(std::size_t offset) const {
    const auto first = static_cast<std::uint32_t>(bytes_[offset]);
    const auto second = static_cast<std::uint32_t>(bytes_[offset + 1]);
    return big_endian_ ? first << 8 | second : second << 8 | first;
  }
  std::uint32_t u32(std::size_t offset) const {
    const std::uint32_t first = u16(offset);
    const std::uint32_t second = u16(offset + 2);
    return big_endian_ ? first << 16 | second : second << 16 | first;
  }

 private:
  std::span<const std::byte> bytes_;
  bool big_endian_;
};

}  // namespace

int exif_orientation(std::span<const std::byte> tiff) {
  constexpr std::uint32_t kOrientationTag = 0x0112;
  constexpr std::uint32_t kShort = 3;
  constexpr std::uint32_t kLong = 4;
  if (tiff.size() < 8) return 1;
  const bool big_endian = tiff[0] == std::byte{'M'} && tiff[1] == std::byte{'M'};
  const bool little_endian = tiff[0] == std::byte{'I'} && tiff[1] == std::byte{'I'};
  if (!big_endian && !little_endian) return 1;
  const TiffReader reader(tiff, big_endian);
  if (reader.u16(2) != 42) return 1;

  const std::uint64_t directory = reader.u32(4);
  if (!reader.holds(directory, 2)) return 1;
  const std::uint64_t entries = reader.u16(directory);
  int orientation = 1;
  for (std::uint64_t i = 0; i < entries; ++i) {
    const std::uint64_t entry = directory + 2 + i * 12;
    if (!reader.holds(entry, 12)) break;
    if (reader.u16(entry) != kOrientationTag || reader.u32(entry + 4) != 1) continue;
    const std::uint32_t type = reader.u16(entry + 2);
    std::uint32_t value = 0;
    if (type == kShort) value = reader.u16(entry + 8);
    if (type == kLong) value = reader.u32(entry + 8);
    if (value >= 1 && value <= 8) orientation = static_cast<int>(value);
  }
  return orientation;
}

Picture turn_upright(Picture picture, int orientation) {
  if (orientation <= 1 || orientation > 8) return picture;
  // Where pixel (0, 0) of the result lies in the stored picture, and the way its rows and columns
  // run there. EXIF 2.3, section 4.6.4: the value says which sides of the scene the stored row 0
  // and column 0 are.
  const bool swaps = orientation >= 5;
  const bool from_right =
      orientation == 2 || orientation == 3 || orientation == 7 || orientation == 8;
  const bool from_bottom =
      orientation == 3 || orientation == 4 || orientation == 6 || orientation == 7;
  const std::int64_t across = from_right ? -3 : 3;
  const std::int64_t down = from_bottom ? -picture.width * 3 : picture.width * 3;
  const std::int64_t start = (from_right ? (picture.width - 1) * 3 : 0) +
                             (from_bottom ? (picture.height - 1) * picture.width * 3 : 0);
  const std::int64_t x_step = swaps ? down : across;
  const std::int64_t y_step = swaps ? across : down;

  Picture turned{swaps ? picture.height : picture.width, swaps ? picture.width : picture.height,
                 std::vector<std::uint8_t>(picture.rgb.size())};
  std::uint8_t* to = turned.rgb.data();
  for (std::int64_t y = 0; y < turned.height; ++y) {
    std::int64_t from = start + y * y_step;
    for (std::int64_t x = 0; x < turned.width; ++x, from += x_step, to += 3) {
      const std::uint8_t* pixel = picture.rgb.data() + from;
      to[0] = pixel[0];
      to[1] = pixel[1];
      to[2] = pixel[2];
    }
  }
  return turned;
}

}  // namespace leadsman::loaders
