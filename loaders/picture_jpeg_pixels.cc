#include "loaders/picture_jpeg_pixels.h"

#include <algorithm>
#include <array>

namespace leadsman::loaders {
namespace {

// Unsigned, so that the sums of damaged data wrap around.
using Wide = std::uint32_t;

constexpr int kConstantBits = 13;
constexpr int kPass1Bits = 2;

constexpr Wide fixed(double value) {
  return static_cast<Wide>(static_cast<std::int32_t>(value * (1 << kConstantBits) + 0.5));
}

std::int32_t descale(Wide value, int bits) {
  return static_cast<std::int32_t>(value + (Wide{1} << (bits - 1))) >> bits;
}

std::uint8_t to_byte(std::int32_t value) {
  return static_cast<std::uint8_t>(std::clamp(value, 0, 255));
}

// One column or row: eight values in, eight sums out that are scaled by 2^13.
std::array<Wide, 8> transform_line(const std::array<Wide, 8>& in) {
  // Even part.
  const Wide turned = (in[2] + in[6]) * fixed(0.541196100);
  const Wide even2 = turned - in[6] * fixed(1.847759065);
  const Wide even3 = turned + in[2] * fixed(0.765366865);
  const Wide even0 = (in[0] + in[4]) << kConstantBits;
  const Wide even1 = (in[0] - in[4]) << kConstantBits;
  const Wide sum0 = even0 + even3;
  const Wide sum3 = even0 - even3;
  const Wide sum1 = even1 + even2;
  const Wide sum2 = even1 - even2;
  // Odd part.
  const Wide z5 = (in[7] + in[3] + in[5] + in[1]) * fixed(1.175875602);
  const Wide z1 = Wide{0} - (in[7] + in[1]) * fixed(0.899976223);
  const Wide z2 = Wide{0} - (in[5] + in[3]) * fixed(2.562915447);
  const Wide z3 = z5 - (in[7] + in[3]) * fixed(1.961570560);
  const Wide z4 = z5 - (in[5] + in[1]) * fixed(0.390180644);
  const Wide odd0 = in[7] * fixed(0.298631336) + z1 + z3;
  const Wide odd1 = in[5] * fixed(2.053119869) + z2 + z4;
  const Wide odd2 = in[3] * fixed(3.072711026) + z2 + z3;
  const Wide odd3 = in[1] * fixed(1.501321110) + z1 + z4;
  return {sum0 + odd3, sum1 + odd2, sum2 + odd1, sum3 + odd0,
          sum3 - odd0, sum2 - odd1, sum1 - odd2, sum0 - odd3};
}

/// Rows of a component at the size of the picture (jdsample.c): doubled components are interpolated
/// by a triangle, 3/4 of the nearer sample and 1/4 of the farther, with roundings that alternate;
/// all other factors, and doubled components at most 2 wide, are repeated.
class Upsampler {
 public:
  explicit Upsampler(const JpegPlane& plane) : plane_(plane) {
    line_.resize(static_cast<std::size_t>(plane.width * plane.across));
  }

  const std::uint8_t* row(std::int64_t y);

 private:
  const std::uint8_t* stored_row(std::int64_t y) const {
    return plane_.samples + std::clamp<std::int64_t>(y, 0, plane_.height - 1) * plane_.stride;
  }
  void double_across(const std::uint8_t* near);
  void double_both(const std::uint8_t* near, const std::uint8_t* far);

  JpegPlane plane_;
  std::vector<std::uint8_t> line_;
};

void Upsampler::double_across(const std::uint8_t* near) {
  const std::int64_t last = plane_.width - 1;
  std::uint8_t* to = line_.data();
  for (std::int64_t x = 0; x <= last; ++x) {
    const int here = near[x] * 3;
    *to++ = static_cast<std::uint8_t>(x == 0 ? near[x] : (here + near[x - 1] + 1) >> 2);
    *to++ = static_cast<std::uint8_t>(x == last ? near[x] : (here + near[x + 1] + 2) >> 2);
  }
}

void Upsampler::double_both(const std::uint8_t* near, const std::uint8_t* far) {
  const std::int64_t last = plane_.width - 1;
  const auto column = [&](std::int64_t x) { return near[x] * 3 + far[x]; };
  int before = column(0);
  int here = before;
  std::uint8_t* to = line_.data();
  for (std::int64_t x = 0; x <= last; ++x) {
    const int after = x == last ? here : column(x + 1);
    *to++ = static_cast<std::uint8_t>((here * 3 + before + 8) >> 4);
    *to++ = static_cast<std::uint8_t>((here * 3 + after + 7) >> 4);
    before = here;
    here = after;
  }
}

const std::uint8_t* Upsampler::row(std::int64_t y) {
  if (plane_.across == 1 && plane_.down == 1) return stored_row(y);
  const std::uint8_t* near = stored_row(y / plane_.down);
  const std::uint8_t* far = stored_row(y % 2 == 0 ? y / 2 - 1 : y / 2 + 1);  // of a doubled one
  if (plane_.across == 2 && plane_.down == 1 && plane_.width > 2) {
    double_across(near);
  } else if (plane_.across == 2 && plane_.down == 2 && plane_.width > 2) {
    double_both(near, far);
  } else if (plane_.across == 1 && plane_.down == 2) {
    const int bias = y % 2 == 0 ? 1 : 2;
    for (std::int64_t x = 0; x < plane_.width; ++x) {
      line_[static_cast<std::size_t>(x)] =
          static_cast<std::uint8_t>((near[x] * 3 + far[x] + bias) >> 2);
    }
  } else {
    std::uint8_t* to = line_.data();
    for (std::int64_t x = 0; x < plane_.width; ++x) to = std::fill_n(to, plane_.across, near[x]);
  }
  return line_.data();
}

/// What chroma adds to luma (jdcolor.c): 16-bit fixed point of the JFIF 1.02 equations.
struct ChromaTables {
  std::array<std::int32_t, 256> cr_red;
  std::array<std::int32_t, 256> cb_blue;
  std::array<std::int32_t, 256> cr_green;  // to be added, then shifted by 16
  std::array<std::int32_t, 256> cb_green;
};

constexpr ChromaTables make_chroma_tables() {
  constexpr std::int32_t half = 1 << 15;
  ChromaTables tables{};
  for (std::int32_t i = 0; i < 256; ++i) {
    const std::int32_t x = i - 128;
    const auto at = static_cast<std::size_t>(i);
    tables.cr_red[at] = (91881 * x + half) >> 16;    // 1.40200
    tables.cb_blue[at] = (116130 * x + half) >> 16;  // 1.77200
    tables.cr_green[at] = -46802 * x;                // 0.71414
    tables.cb_green[at] = -22554 * x + half;         // 0.34414
  }
  return tables;
}
constexpr ChromaTables kChroma = make_chroma_tables();

void ycc_to_rgb(int y, std::uint8_t cb, std::uint8_t cr, std::uint8_t* to) {
  to[0] = to_byte(y + kChroma.cr_red[cr]);
  to[1] = to_byte(y + ((kChroma.cb_green[cb] + kChroma.cr_green[cr]) >> 16));
  to[2] = to_byte(y + kChroma.cb_blue[cb]);
}

// `ink` and `black` as stored, that is, inverted. Pillow's cmyk2rgb (Convert.c).
std::uint8_t ink_to_light(std::uint8_t ink, std::uint8_t black) {
  const int product = (255 - ink) * black + 128;
  return to_byte(black - ((product >> 8) + product) / 256);
}

}  // namespace

void jpeg_inverse_transform(std::uint8_t* out, int stride, short* coefficients) {
  std::array<Wide, 64> columns;
  for (std::size_t x = 0; x < 8; ++x) {
    std::array<Wide, 8> in;
    bool flat = true;
    for (std::size_t y = 0; y < 8; ++y) {
      in[y] = static_cast<Wide>(static_cast<std::int32_t>(coefficients[y * 8 + x]));
      flat = flat && (y == 0 || in[y] == 0);
    }
    if (flat) {  // the same result as below, sooner
      for (std::size_t y = 0; y < 8; ++y) columns[y * 8 + x] = in[0] << kPass1Bits;
      continue;
    }
    const std::array<Wide, 8> sums = transform_line(in);
    for (std::size_t y = 0; y < 8; ++y) {
      columns[y * 8 + x] = static_cast<Wide>(descale(sums[y], kConstantBits - kPass1Bits));
    }
  }
  for (std::size_t y = 0; y < 8; ++y, out += stride) {
    std::array<Wide, 8> in;
    std::copy_n(columns.data() + y * 8, 8, in.data());
    const std::array<Wide, 8> sums = transform_line(in);
    for (std::size_t x = 0; x < 8; ++x) {
      out[x] = to_byte(descale(sums[x], kConstantBits + kPass1Bits + 3) + 128);
    }
  }
}

void jpeg_planes_to_rgb(const JpegPlanes& planes, JpegColours colours, Picture& picture) {
  std::vector<Upsampler> samplers(planes.planes.begin(), planes.planes.end());
  std::array<const std::uint8_t*, 4> rows{};
  std::uint8_t* to = picture.rgb.data();
  for (std::int64_t y = 0; y < picture.height; ++y) {
    for (std::size_t i = 0; i < samplers.size(); ++i) rows[i] = samplers[i].row(y);
    for (std::int64_t x = 0; x < picture.width; ++x, to += 3) {
      switch (colours) {
        case JpegColours::kGrey:
          to[0] = to[1] = to[2] = rows[0][x];
          break;
        case JpegColours::kRgb:
          for (std::size_t c = 0; c < 3; ++c) to[c] = rows[c][x];
          break;
        case JpegColours::kYcc:
          ycc_to_rgb(rows[0][x], rows[1][x], rows[2][x], to);
          break;
        case JpegColours::kCmyk:
          for (std::size_t c = 0; c < 3; ++c) to[c] = ink_to_light(rows[c][x], rows[3][x]);
          break;
        case JpegColours::kYcck:
          ycc_to_rgb(rows[0][x], rows[1][x], rows[2][x], to);
          for (std::size_t c = 0; c < 3; ++c) {
            to[c] = ink_to_light(static_cast<std::uint8_t>(255 - to[c]), rows[3][x]);
          }
          break;
      }
    }
  }
}

}  // namespace leadsman::loaders
