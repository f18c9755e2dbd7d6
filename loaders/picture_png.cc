// PNG (ISO/IEC 15948, second edition): chunks, filters, interlacing and sample formats. Numbers
// below are clauses of the standard.
#include <algorithm>
#include <array>
#include <cstdlib>
#include <utility>

#include "loaders/crc32.h"
#include "loaders/inflate.h"
#include "loaders/picture_formats.h"

namespace leadsman::loaders {
namespace {

enum ColourType {
  kGreyType = 0,
  kColourType = 2,
  kPaletteType = 3,
  kGreyAlphaType = 4,
  kColourAlphaType = 6
};

struct PngFile {
  std::int64_t width = 0;
  std::int64_t height = 0;
  int depth = 0;
  int colour = 0;
  bool interlaced = false;
  std::array<std::uint8_t, 768> palette{};
  bool has_palette = false;
  std::span<const std::byte> data;  // of the IDAT chunks
  std::vector<std::byte> joined;    // holds `data` when there are several
  std::span<const std::byte> exif;

  int samples() const {
    switch (colour) {
      case kColourType:
        return 3;
      case kGreyAlphaType:
        return 2;
      case kColourAlphaType:
        return 4;
      default:
        return 1;
    }
  }
  std::int64_t row_bytes(std::int64_t columns) const {
    return (columns * samples() * depth + 7) / 8;
  }
};

void read_header(const PictureSource& source, std::size_t at, std::size_t length, PngFile& png) {
  if (length != 13) source.fail("has a damaged PNG header");
  png.width = source.be32(at);
  png.height = source.be32(at + 4);
  png.depth = source.at(at + 8);
  png.colour = source.at(at + 9);
  png.interlaced = source.at(at + 12) == 1;
  const int d = png.depth;
  bool known = false;
  switch (png.colour) {
    case kGreyType:
      known = d == 1 || d == 2 || d == 4 || d == 8 || d == 16;
      break;
    case kPaletteType:
      known = d == 1 || d == 2 || d == 4 || d == 8;
      break;
    case kColourType:
    case kGreyAlphaType:
    case kColourAlphaType:
      known = d == 8 || d == 16;
      break;
    default:
      break;
  }
  if (!known || source.at(at + 10) != 0 || source.at(at + 11) != 0 || source.at(at + 12) > 1) {
    source.fail("has a PNG header that the standard does not know");
  }
  check_picture_size(source, png.width, png.height);
}

void read_palette(const PictureSource& source, std::size_t at, std::size_t length, PngFile& png) {
  if (length == 0 || length % 3 != 0 || length > 768 || png.has_palette) {
    source.fail("has a damaged PNG palette");
  }
  for (std::size_t i = 0; i < 768; ++i) {
    png.palette[i] = i < length ? source.at(at + i) : static_cast<std::uint8_t>(i / 3);
  }
  png.has_palette = true;
}

PngFile read_chunks(const PictureSource& source) {
  PngFile png;
  std::size_t at = 8;
  std::vector<std::span<const std::byte>> parts;
  bool data_over = false;
  for (bool first = true;; first = false) {
    if (source.size() - at < 12) source.fail("ends before its IEND chunk: it is cut short");
    const std::size_t length = source.be32(at);
    if (length > source.size() - at - 12) {
      source.fail("ends inside a PNG chunk: it is cut short or damaged");
    }
    const std::size_t body = at + 8;
    if (crc32(source.bytes.subspan(at + 4, length + 4)) != source.be32(body + length)) {
      source.fail("is damaged: the checksum of a PNG chunk at byte " + std::to_string(at) +
                  " does not fit");
    }
    const bool is_header = source.starts_with("IHDR", at + 4);
    const bool is_data = source.starts_with("IDAT", at + 4);
    if (is_header != first) source.fail("has a PNG header that is missing or out of place");
    if (is_header) {
      read_header(source, body, length, png);
    } else if (source.starts_with("PLTE", at + 4)) {
      read_palette(source, body, length, png);
    } else if (is_data) {
      if (data_over) source.fail("has PNG data in two places");
      parts.push_back(source.bytes.subspan(body, length));
    } else if (source.starts_with("eXIf", at + 4)) {
      png.exif = source.bytes.subspan(body, length);
    } else if (source.starts_with("IEND", at + 4)) {
      break;
    } else if ((source.at(at + 4) & 0x20) == 0) {  // 5.4: a critical chunk
      source.fail("needs a PNG extension that is not read");
    }
    data_over = !is_data && !parts.empty();
    at = body + length + 4;
  }
  if (png.colour == kPaletteType && !png.has_palette) source.fail("lacks its PNG palette");
  if (parts.size() == 1) {
    png.data = parts[0];
  } else {
    for (const auto& part : parts) png.joined.insert(png.joined.end(), part.begin(), part.end());
    png.data = png.joined;
  }
  return png;
}

// Clause 10: a zlib stream (RFC 1950), of which more than the picture needs is left alone. Its
// Adler checksum is not looked at: the chunks have theirs.
void unpack(const PictureSource& source, std::span<const std::byte> data,
            std::span<std::uint8_t> samples) {
  const auto byte = [&](std::size_t i) { return std::to_integer<unsigned>(data[i]); };
  const bool is_zlib = data.size() >= 2 && (byte(0) & 15) == 8 && (byte(1) & 0x20) == 0 &&
                       (byte(0) << 8 | byte(1)) % 31 == 0;
  std::size_t filled = 0;
  if (is_zlib) {
    try {
      filled = inflate_start(data.subspan(2), std::as_writable_bytes(samples));
    } catch (const Error&) {
      source.fail("has damaged PNG data");
    }
  }
  if (filled != samples.size()) source.fail("has PNG data that does not fill the picture");
}

int paeth(int left, int above, int corner) {
  const int to_left = std::abs(above - corner);  // of the guess left + above - corner
  const int to_above = std::abs(left - corner);
  const int to_corner = std::abs(left + above - 2 * corner);
  const int nearer = to_above <= to_corner ? above : corner;
  return to_left <= std::min(to_above, to_corner) ? left : nearer;
}

// Clause 9. `above` is the row before, zeros at the top.
bool unfilter(int filter, std::uint8_t* row, const std::uint8_t* above, std::int64_t bytes,
              std::int64_t step) {
  const auto add = [row](std::int64_t i, int value) {
    row[i] = static_cast<std::uint8_t>(row[i] + value);
  };
  const std::int64_t start = std::min(step, bytes);  // what has nothing to its left
  switch (filter) {
    case 0:
      return true;
    case 1:
      for (std::int64_t i = start; i < bytes; ++i) add(i, row[i - step]);
      return true;
    case 2:
      for (std::int64_t i = 0; i < bytes; ++i) add(i, above[i]);
      return true;
    case 3:
      for (std::int64_t i = 0; i < start; ++i) add(i, above[i] / 2);
      for (std::int64_t i = start; i < bytes; ++i) add(i, (row[i - step] + above[i]) / 2);
      return true;
    case 4:
      for (std::int64_t i = 0; i < start; ++i) add(i, above[i]);
      for (std::int64_t i = start; i < bytes; ++i) {
        add(i, paeth(row[i - step], above[i], above[i - step]));
      }
      return true;
    default:
      return false;
  }
}

// One row of samples to RGB. picture.h says how.
void to_rgb(const PngFile& png, const std::uint8_t* row, std::int64_t count, std::uint8_t* to) {
  const std::int64_t wide = png.depth == 16 ? 2 : 1;
  if (png.colour == kColourType || png.colour == kColourAlphaType) {
    const std::int64_t step = png.samples() * wide;
    for (std::int64_t i = 0; i < count; ++i, row += step, to += 3) {
      to[0] = row[0];
      to[1] = row[wide];
      to[2] = row[2 * wide];
    }
    return;
  }
  for (std::int64_t i = 0; i < count; ++i, to += 3) {
    int value = 0;
    if (png.depth < 8) {
      const std::int64_t bit = i * png.depth;
      value = row[bit / 8] >> (8 - png.depth - bit % 8) & ((1 << png.depth) - 1);
      if (png.colour == kGreyType) value = value * 255 / ((1 << png.depth) - 1);
    } else if (png.colour == kGreyAlphaType) {
      value = row[i * 2 * wide];
    } else if (wide == 2) {
      value = row[i * 2] != 0 ? 255 : row[i * 2 + 1];
    } else {
      value = row[i];
    }
    if (png.colour == kPaletteType) {
      const std::uint8_t* entry = png.palette.data() + std::ptrdiff_t{3} * value;
      to[0] = entry[0];
      to[1] = entry[1];
      to[2] = entry[2];
    } else {
      to[0] = to[1] = to[2] = static_cast<std::uint8_t>(value);
    }
  }
}

// A grid of pixels that is stored as a picture of its own (8.2).
struct Pass {
  std::int64_t x, y, x_step, y_step;
};
constexpr Pass kWhole[] = {{0, 0, 1, 1}};
constexpr Pass kAdam7[] = {{0, 0, 8, 8}, {4, 0, 8, 8}, {0, 4, 4, 8}, {2, 0, 4, 4},
                           {0, 2, 2, 4}, {1, 0, 2, 2}, {0, 1, 1, 2}};

}  // namespace

DecodedPicture decode_png(const PictureSource& source) {
  const PngFile png = read_chunks(source);
  const std::span<const Pass> passes =
      png.interlaced ? std::span<const Pass>(kAdam7) : std::span<const Pass>(kWhole);
  const auto columns_of = [&](const Pass& pass) {
    return png.width <= pass.x ? 0 : (png.width - pass.x + pass.x_step - 1) / pass.x_step;
  };
  const auto rows_of = [&](const Pass& pass) {
    return png.height <= pass.y ? 0 : (png.height - pass.y + pass.y_step - 1) / pass.y_step;
  };
  std::int64_t bytes = 0;
  for (const Pass& pass : passes) {
    const std::int64_t columns = columns_of(pass);
    if (columns > 0) bytes += rows_of(pass) * (1 + png.row_bytes(columns));
  }
  // A stream of n bytes holds at most 1032 n (a bomb, or a header that lies, is told before the
  // memory is taken).
  if (bytes / 1032 > static_cast<std::int64_t>(png.data.size())) {
    source.fail("has PNG data that does not fill the picture");
  }

  std::vector<std::uint8_t> samples(static_cast<std::size_t>(bytes));
  unpack(source, png.data, samples);
  DecodedPicture decoded{make_picture(source, png.width, png.height), png.exif};
  std::vector<std::uint8_t> line(static_cast<std::size_t>(png.width * 3));
  const std::vector<std::uint8_t> zeros(static_cast<std::size_t>(png.row_bytes(png.width)));
  const std::int64_t step = std::max(1, png.samples() * png.depth / 8);
  std::uint8_t* row = samples.data();
  for (const Pass& pass : passes) {
    const std::int64_t columns = columns_of(pass);
    if (columns == 0) continue;
    const std::int64_t row_bytes = png.row_bytes(columns);
    const std::uint8_t* above = zeros.data();
    for (std::int64_t y = 0; y < rows_of(pass); ++y) {
      const int filter = *row++;
      if (!unfilter(filter, row, above, row_bytes, step)) {
        source.fail("has damaged PNG data");
      }
      std::uint8_t* to =
          decoded.picture.rgb.data() + ((pass.y + y * pass.y_step) * png.width + pass.x) * 3;
      if (pass.x_step == 1) {
        to_rgb(png, row, columns, to);
      } else {
        to_rgb(png, row, columns, line.data());
        for (std::int64_t i = 0; i < columns; ++i) {
          std::copy_n(line.data() + i * 3, 3, to + i * pass.x_step * 3);
        }
      }
      above = row;
      row += row_bytes;
    }
  }
  return decoded;
}

}  // namespace leadsman::loaders
