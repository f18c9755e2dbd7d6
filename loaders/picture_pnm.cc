// PNM (netpbm's pbm, pgm and ppm, plain and raw), as Pillow 9.4 reads it (PpmImagePlugin.py).
#include <algorithm>
#include <cmath>

#include "loaders/picture_formats.h"

namespace leadsman::loaders {
namespace {

class PnmReader {
 public:
  explicit PnmReader(const PictureSource& source) : source_(source) {}

  std::size_t position() const { return position_; }
  /// A decimal number and the one white space behind it.
  std::int64_t number();
  /// A digit of plain pbm, which needs no white space around it.
  int bit();

 private:
  static bool is_space(std::uint8_t c) { return c == ' ' || (c >= '\t' && c <= '\r'); }
  /// The next character outside comments, which run from # to the end of their line.
  int next();

  const PictureSource& source_;
  std::size_t position_ = 2;
};

int PnmReader::next() {
  while (position_ < source_.size()) {
    const std::uint8_t c = source_.at(position_++);
    if (c != '#') return c;
    while (position_ < source_.size() && source_.at(position_) != '\n' &&
           source_.at(position_) != '\r') {
      ++position_;
    }
    if (position_ < source_.size()) ++position_;
  }
  return -1;
}

std::int64_t PnmReader::number() {
  std::int64_t value = -1;
  while (true) {
    const int c = next();
    if (c < 0 || is_space(static_cast<std::uint8_t>(c))) {
      if (value >= 0) return value;
      if (c < 0) source_.fail("ends before its last PNM number: it is cut short");
    } else if (c >= '0' && c <= '9') {
      value = std::max<std::int64_t>(value, 0) * 10 + (c - '0');
      if (value > 999999999) source_.fail("has a PNM number that is too large");
    } else {
      source_.fail("has a PNM number with a character that is not a digit");
    }
  }
}

int PnmReader::bit() {
  while (true) {
    const int c = next();
    if (c == '0' || c == '1') return c - '0';
    if (c < 0) source_.fail("ends before its last PNM pixel: it is cut short");
    if (!is_space(static_cast<std::uint8_t>(c))) {
      source_.fail("has a PNM pixel that is neither 0 nor 1");
    }
  }
}

/// Bytes of a sample, by value. Grey of more than 8 bits is spread over 0..65535 and then clipped
/// (picture.h). Halves go to even, as Python rounds.
std::vector<std::uint8_t> sample_table(std::int64_t largest, bool is_grey) {
  const double top = is_grey && largest > 255 ? 65535.0 : 255.0;
  std::vector<std::uint8_t> table(static_cast<std::size_t>(largest) + 1);
  for (std::size_t i = 0; i < table.size(); ++i) {
    const double value =
        std::nearbyint(static_cast<double>(i) / static_cast<double>(largest) * top);
    table[i] = static_cast<std::uint8_t>(std::min(value, 255.0));
  }
  return table;
}

}  // namespace

DecodedPicture decode_pnm(const PictureSource& source) {
  const int kind = source.at(1) - '0';
  const bool is_plain = kind <= 3;
  const bool is_bits = kind == 1 || kind == 4;
  const bool is_grey = kind == 2 || kind == 5;
  if (source.size() < 3 || !(source.at(2) == '#' || source.at(2) == ' ' ||
                             (source.at(2) >= '\t' && source.at(2) <= '\r'))) {
    source.fail("is not JPEG, PNG, BMP or PNM");
  }
  PnmReader reader(source);
  const std::int64_t width = reader.number();
  const std::int64_t height = reader.number();
  check_picture_size(source, width, height);
  const std::int64_t largest = is_bits ? 1 : reader.number();
  if (largest < 1 || largest > 65535) source.fail("has a PNM maximum that is not in 1..65535");

  const std::int64_t samples = width * height * (is_bits || is_grey ? 1 : 3);
  const std::int64_t sample_bytes = largest > 255 ? 2 : 1;
  const std::int64_t row_bytes = (width + 7) / 8;
  const std::size_t start = reader.position();
  const std::int64_t left = static_cast<std::int64_t>(source.size() - start);
  // Plain numbers take a digit and a space each, but for the last.
  const std::int64_t needed = kind == 1  ? samples
                              : is_plain ? samples * 2 - 1
                              : is_bits  ? row_bytes * height
                                         : samples * sample_bytes;
  if (needed > left) source.fail("ends before its last PNM pixel: it is cut short");

  DecodedPicture decoded{make_picture(source, width, height), {}};
  std::uint8_t* to = decoded.picture.rgb.data();
  if (is_bits) {
    for (std::int64_t i = 0; i < samples; ++i, to += 3) {
      const std::int64_t x = i % width;
      const bool black =
          is_plain ? reader.bit() != 0
                   : (source.at(start + static_cast<std::size_t>(i / width * row_bytes + x / 8)) >>
                          (7 - x % 8) &
                      1) != 0;
      to[0] = to[1] = to[2] = black ? 0 : 255;
    }
    return decoded;
  }
  const std::vector<std::uint8_t> table = sample_table(largest, is_grey);
  for (std::int64_t i = 0; i < samples; ++i) {
    std::int64_t value = 0;
    if (is_plain) {
      value = reader.number();
      if (value > largest) source.fail("has a PNM value above its maximum");
    } else if (sample_bytes == 1) {
      value = source.at(start + static_cast<std::size_t>(i));
    } else {
      value = source.be16(start + static_cast<std::size_t>(2 * i));
    }
    const std::uint8_t byte = value > largest ? 255 : table[static_cast<std::size_t>(value)];
    if (is_grey) {
      to[0] = to[1] = to[2] = byte;
      to += 3;
    } else {
      *to++ = byte;
    }
  }
  return decoded;
}

}  // namespace leadsman::loaders
