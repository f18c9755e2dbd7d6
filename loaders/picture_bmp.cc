// BMP: Windows and OS/2 bitmaps without compression, the pixel layouts that Pillow 9.4 reads
// (BmpImagePlugin.py).
#include <array>
#include <cstdlib>

#include "loaders/picture_formats.h"

namespace leadsman::loaders {
namespace {

constexpr std::uint32_t kPlain = 0;
constexpr std::uint32_t kRunLength8 = 1;
constexpr std::uint32_t kRunLength4 = 2;
constexpr std::uint32_t kBitFields = 3;

struct BmpFile {
  std::int64_t width = 0;
  std::int64_t height = 0;
  bool top_down = false;
  std::uint32_t bits = 0;
  std::size_t pixels = 0;  // offset of the first stored row
  std::array<std::uint8_t, 768> palette{};
  /// 24 and 32 bits: where R, G and B lie in a pixel. 16 bits: green has `green_bits`.
  std::array<std::size_t, 3> places = {2, 1, 0};
  int green_bits = 5;
};

using Masks = std::array<std::uint32_t, 3>;

void use_masks(const PictureSource& source, const Masks& masks, BmpFile& bmp) {
  if (bmp.bits == 16 && masks == Masks{0xf800, 0x7e0, 0x1f}) {
    bmp.green_bits = 6;
  } else if (bmp.bits == 16 && masks == Masks{0x7c00, 0x3e0, 0x1f}) {
    bmp.green_bits = 5;
  } else if ((bmp.bits == 24 || bmp.bits == 32) && masks == Masks{0xff0000, 0xff00, 0xff}) {
    bmp.places = {2, 1, 0};
  } else if (bmp.bits == 32 && masks == Masks{0, 0, 0}) {
    bmp.places = {2, 1, 0};
  } else if (bmp.bits == 32 && masks == Masks{0xff000000, 0xff0000, 0xff00}) {
    bmp.places = {3, 2, 1};
  } else if (bmp.bits == 32 && masks == Masks{0xff, 0xff00, 0xff0000}) {
    bmp.places = {0, 1, 2};
  } else {
    source.fail("is a BMP with a pixel layout that is not read");
  }
}

BmpFile read_header(const PictureSource& source) {
  const auto need = [&](std::size_t end) {
    if (end > source.size()) source.fail("ends inside its BMP header: it is cut short");
  };
  need(18);
  BmpFile bmp;
  bmp.pixels = source.le32(10);
  const std::size_t header = source.le32(14);
  const bool is_old = header == 12;
  if (!is_old && header != 40 && header != 52 && header != 56 && header != 64 && header != 108 &&
      header != 124) {
    source.fail("has a BMP header of " + std::to_string(header) + " bytes, which is not read");
  }
  need(14 + header);
  std::uint32_t compression = kPlain;
  std::size_t colours = 0;
  if (is_old) {
    bmp.width = source.le16(18);
    bmp.height = source.le16(20);
    bmp.bits = source.le16(24);
  } else {
    bmp.width = static_cast<std::int32_t>(source.le32(18));
    bmp.height = static_cast<std::int32_t>(source.le32(22));
    bmp.bits = source.le16(28);
    compression = source.le32(30);
    colours = source.le32(46);
  }
  bmp.top_down = bmp.height < 0;
  if (bmp.top_down) bmp.height = -bmp.height;
  check_picture_size(source, bmp.width, bmp.height);

  if (compression == kRunLength8 || compression == kRunLength4) {
    source.fail("is a BMP with run-length coding, which is not read");
  }
  if (compression != kPlain && compression != kBitFields) {
    source.fail("is a BMP with compression " + std::to_string(compression) + ", which is not read");
  }
  const bool has_palette = bmp.bits == 1 || bmp.bits == 4 || bmp.bits == 8;
  if (!has_palette && bmp.bits != 16 && bmp.bits != 24 && bmp.bits != 32) {
    source.fail("is a BMP of " + std::to_string(bmp.bits) + " bits a pixel, which is not read");
  }
  std::size_t after = 14 + header;
  if (compression == kBitFields) {
    need(66);  // a 40-byte header has its masks behind it, the longer ones inside, at one place
    use_masks(source, {source.le32(54), source.le32(58), source.le32(62)}, bmp);
    if (header == 40) after += 12;
  }
  if (has_palette) {
    const std::size_t entry = is_old ? 3 : 4;
    if (colours == 0) colours = std::size_t{1} << bmp.bits;
    if (colours > 65536) source.fail("has a damaged BMP palette");
    need(after + colours * entry);
    for (std::size_t i = 0; i < 256; ++i) {
      for (std::size_t c = 0; c < 3; ++c) {
        bmp.palette[i * 3 + c] =
            i < colours ? source.at(after + i * entry + 2 - c) : static_cast<std::uint8_t>(i);
      }
    }
    // Some writers forget the palette when they say where the pixels begin.
    if (bmp.pixels == after) bmp.pixels += colours * entry;
    after += colours * entry;
  }
  if (bmp.pixels == 0) bmp.pixels = after;
  return bmp;
}

void to_rgb(const BmpFile& bmp, const std::uint8_t* row, std::uint8_t* to) {
  const auto spread = [](std::uint32_t value, int bits) {
    const std::uint32_t most = (1u << bits) - 1;
    return static_cast<std::uint8_t>((value & most) * 255 / most);
  };
  for (std::int64_t x = 0; x < bmp.width; ++x, to += 3) {
    if (bmp.bits >= 24) {
      const std::uint8_t* pixel = row + x * (bmp.bits / 8);
      for (std::size_t c = 0; c < 3; ++c) to[c] = pixel[bmp.places[c]];
    } else if (bmp.bits == 16) {
      const std::uint32_t pixel = row[x * 2] | static_cast<std::uint32_t>(row[x * 2 + 1]) << 8;
      to[0] = spread(pixel >> (5 + bmp.green_bits), 5);
      to[1] = spread(pixel >> 5, bmp.green_bits);
      to[2] = spread(pixel, 5);
    } else {
      const std::int64_t bit = x * bmp.bits;
      const int value = row[bit / 8] >> (8 - bmp.bits - bit % 8) & ((1 << bmp.bits) - 1);
      for (std::size_t c = 0; c < 3; ++c) {
        to[c] = bmp.palette[static_cast<std::size_t>(value) * 3 + c];
      }
    }
  }
}

}  // namespace

DecodedPicture decode_bmp(const PictureSource& source) {
  const BmpFile bmp = read_header(source);
  const std::int64_t stride = (bmp.width * bmp.bits + 31) / 32 * 4;
  // Pillow's last row may lack its padding; so may ours.
  const std::int64_t bytes = stride * (bmp.height - 1) + (bmp.width * bmp.bits + 7) / 8;
  if (bmp.pixels > source.size() || bytes > static_cast<std::int64_t>(source.size() - bmp.pixels)) {
    source.fail("ends before its last BMP row: it is cut short");
  }
  DecodedPicture decoded{make_picture(source, bmp.width, bmp.height), {}};
  const auto* rows = reinterpret_cast<const std::uint8_t*>(source.bytes.data()) + bmp.pixels;
  for (std::int64_t y = 0; y < bmp.height; ++y) {
    const std::int64_t stored = bmp.top_down ? y : bmp.height - 1 - y;
    to_rgb(bmp, rows + stored * stride, decoded.picture.rgb.data() + y * bmp.width * 3);
  }
  return decoded;
}

}  // namespace leadsman::loaders
