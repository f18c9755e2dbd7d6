#include "loaders/half.h"

#include <array>
#include <bit>
#include <cmath>
#include <cstdint>
#include <utility>

#include <gtest/gtest.h>

namespace leadsman::loaders {
namespace {

std::uint32_t bits_of(float value) {
  return std::bit_cast<std::uint32_t>(value);
}
float from_bits(std::uint32_t bits) {
  return std::bit_cast<float>(bits);
}

// NumPy 1.24.2: numpy.array([h], uint16).view(float16).astype(float32).
TEST(Half, ToFloatEqualsNumpy) {
  constexpr std::array<std::pair<std::uint16_t, std::uint32_t>, 15> kCases = {
      {{0x0000, 0x00000000},
       {0x8000, 0x80000000},
       {0x0001, 0x33800000},
       {0x03ff, 0x387fc000},
       {0x0400, 0x38800000},
       {0x7bff, 0x477fe000},
       {0x7c00, 0x7f800000},
       {0xfc00, 0xff800000},
       {0x3c00, 0x3f800000},
       {0x3555, 0x3eaaa000},
       {0x83ff, 0xb87fc000},
       {0x0200, 0x38000000},
       {0x7e00, 0x7fc00000},
       {0x7c01, 0x7f802000},
       {0xfdff, 0xffbfe000}}};
  for (const auto& [half, expected] : kCases) {
    EXPECT_EQ(bits_of(half_to_float(half)), expected) << std::hex << half;
  }
}

// IEEE 754-2019, 3.4: (-1)^s * 2^(e-15) * (1 + f/1024), or (-1)^s * 2^-14 * f/1024 for e = 0.
TEST(Half, ToFloatFollowsTheFormulaForEveryHalf) {
  for (std::uint32_t half = 0; half < 0x10000; ++half) {
    const int exponent = static_cast<int>(half >> 10 & 31);
    const int fraction = static_cast<int>(half & 1023);
    const float value = half_to_float(static_cast<std::uint16_t>(half));
    EXPECT_EQ(std::signbit(value), half >= 0x8000);
    if (exponent == 31) {
      EXPECT_EQ(std::isnan(value), fraction != 0) << half;
      EXPECT_EQ(std::isinf(value), fraction == 0) << half;
      continue;
    }
    const double expected =
        exponent == 0 ? std::ldexp(fraction, -24) : std::ldexp(1024 + fraction, exponent - 25);
    ASSERT_EQ(std::fabs(static_cast<double>(value)), expected) << half;
  }
}

// NumPy 1.24.2: numpy.float32(x).astype(float16); rounding, ties, subnormals, overflow, NaNs.
TEST(Half, FromFloatEqualsNumpy) {
  constexpr std::array<std::pair<std::uint32_t, std::uint16_t>, 34> kCases = {
      {{0x00000000, 0x0000}, {0x80000000, 0x8000}, {0x3f800000, 0x3c00}, {0xc0000000, 0xc000},
       {0x477fe000, 0x7bff}, {0x477fefff, 0x7bff}, {0x477ff000, 0x7c00}, {0x47800000, 0x7c00},
       {0x4e6e6b28, 0x7c00}, {0x7f800000, 0x7c00}, {0xff800000, 0xfc00}, {0x38800000, 0x0400},
       {0x387fffff, 0x0400}, {0x33800000, 0x0001}, {0x33000000, 0x0000}, {0x33000001, 0x0001},
       {0x33c00000, 0x0002}, {0x34200000, 0x0002}, {0x2edbe6ff, 0x0000}, {0xb3d6bf95, 0x8002},
       {0x3f801000, 0x3c00}, {0x3f803000, 0x3c02}, {0x3f801001, 0x3c01}, {0x38fff000, 0x0800},
       {0x40490fdb, 0x4248}, {0x3dcccccd, 0x2e66}, {0x3eaaaaab, 0x3555}, {0xc49a5225, 0xe4d3},
       {0x45001000, 0x6800}, {0x45003000, 0x6802}, {0x7fc00000, 0x7e00}, {0x7f800001, 0x7c01},
       {0xffc12345, 0xfe09}, {0x7fffe000, 0x7fff}}};
  for (const auto& [value, expected] : kCases) {
    EXPECT_EQ(float_to_half(from_bits(value)), expected) << std::hex << value;
  }
}

TEST(Half, EveryHalfComesBack) {
  for (std::uint32_t half = 0; half < 0x10000; ++half) {
    const std::uint16_t h = static_cast<std::uint16_t>(half);
    ASSERT_EQ(float_to_half(half_to_float(h)), h) << std::hex << half;
  }
}

// Between every two neighbours: the middle goes to the even one, anything off it to the nearer.
TEST(Half, RoundsToNearestEvenEverywhere) {
  for (std::uint16_t half = 0; half < 0x7c00; ++half) {
    const float low = half_to_float(half);
    // What would follow the largest half is 2^16; from the middle on it is infinite.
    const float high =
        half == 0x7bff ? 65536.0f : half_to_float(static_cast<std::uint16_t>(half + 1));
    const float middle = low + (high - low) / 2;  // exact
    const std::uint16_t above = static_cast<std::uint16_t>(half + 1);
    ASSERT_EQ(float_to_half(middle), half % 2 == 0 ? half : above) << half;
    ASSERT_EQ(float_to_half(std::nextafter(middle, low)), half) << half;
    ASSERT_EQ(float_to_half(std::nextafter(middle, high)), above) << half;
    ASSERT_EQ(float_to_half(-middle), float_to_half(middle) | 0x8000) << half;
  }
}

// PyTorch 1.13: torch.tensor(x).to(torch.bfloat16).
TEST(Bfloat16, FromFloatEqualsPytorch) {
  constexpr std::array<std::pair<std::uint32_t, std::uint16_t>, 20> kCases = {
      {{0x00000000, 0x0000}, {0x80000000, 0x8000}, {0x3f800000, 0x3f80}, {0xc0000000, 0xc000},
       {0x7f7f0000, 0x7f7f}, {0x7f7fffff, 0x7f80}, {0x7f7f8000, 0x7f80}, {0x7f800000, 0x7f80},
       {0xff800000, 0xff80}, {0x3f808000, 0x3f80}, {0x3f818000, 0x3f82}, {0x3f808001, 0x3f81},
       {0x000116c2, 0x0001}, {0x80000001, 0x8000}, {0x40490fdb, 0x4049}, {0x3dcccccd, 0x3dcd},
       {0x3eaaaaab, 0x3eab}, {0xc49a5225, 0xc49a}, {0x43808000, 0x4380}, {0x43818000, 0x4382}}};
  for (const auto& [value, expected] : kCases) {
    EXPECT_EQ(float_to_bfloat16(from_bits(value)), expected) << std::hex << value;
  }
}

TEST(Bfloat16, EveryValueComesBackAndNansStayNans) {
  for (std::uint32_t i = 0; i < 0x10000; ++i) {
    const std::uint16_t value = static_cast<std::uint16_t>(i);
    const float wide = bfloat16_to_float(value);
    ASSERT_EQ(bits_of(wide), i << 16);
    if (std::isnan(wide)) {
      ASSERT_EQ(float_to_bfloat16(wide), value | 0x40);  // quiet
    } else {
      ASSERT_EQ(float_to_bfloat16(wide), value);
    }
  }
  // A NaN whose payload lies wholly in the lower half must not become infinite.
  EXPECT_TRUE(std::isnan(bfloat16_to_float(float_to_bfloat16(from_bits(0x7f800001)))));
}

}  // namespace
}  // namespace leadsman::loaders
