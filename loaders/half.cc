#include "loaders/half.h"

#include <bit>

namespace leadsman::loaders {

// Layouts (sign, exponent, fraction bits): half 1, 5, 10 with bias 15; float 1, 8, 23 with bias
// 127; bfloat16 is the upper half of a float.

float half_to_float(std::uint16_t half) {
  const std::uint32_t sign = (static_cast<std::uint32_t>(half) & 0x8000u) << 16;
  const std::uint32_t exponent = (half >> 10) & 0x1fu;
  std::uint32_t fraction = half & 0x3ffu;
  if (exponent == 0x1fu) {
    return std::bit_cast<float>(sign | 0x7f800000u | fraction << 13);
  }
  if (exponent != 0) {
    return std::bit_cast<float>(sign | (exponent + 127 - 15) << 23 | fraction << 13);
  }
  if (fraction == 0) return std::bit_cast<float>(sign);
  // Subnormal, fraction * 2^-24: normalised, as float reaches further down.
  const int shift = std::countl_zero(fraction) - 21;  // brings the leading one to bit 10
  fraction = fraction << shift & 0x3ffu;
  return std::bit_cast<float>(sign | (127u - 14u - static_cast<std::uint32_t>(shift)) << 23 |
                              fraction << 13);
}

std::uint16_t float_to_half(float value) {
  const std::uint32_t bits = std::bit_cast<std::uint32_t>(value);
  const std::uint32_t sign = bits >> 16 & 0x8000u;
  const std::uint32_t magnitude = bits & 0x7fffffffu;
  if (magnitude > 0x7f800000u) {
    const std::uint32_t payload = magnitude >> 13 & 0x3ffu;
    return static_cast<std::uint16_t>(sign | 0x7c00u | (payload == 0 ? 1u : payload));
  }
  if (magnitude >= 0x47800000u) return static_cast<std::uint16_t>(sign | 0x7c00u);  // >= 2^16
  if (magnitude >= 0x38800000u) {  // >= 2^-14: normal; a carry may run up to infinity, rightly
    std::uint32_t rebiased = magnitude - (112u << 23);
    rebiased += 0xfffu + (rebiased >> 13 & 1u);
    return static_cast<std::uint16_t>(sign | rebiased >> 13);
  }
  if (magnitude <= 0x33000000u) return static_cast<std::uint16_t>(sign);  // <= 2^-25: zero
  // Subnormal: a whole number of 2^-24.
  const std::uint32_t shift = 126u - (magnitude >> 23);
  const std::uint32_t significand = (magnitude & 0x7fffffu) | 0x800000u;
  std::uint32_t units = significand >> shift;
  const std::uint32_t rest = significand & ((1u << shift) - 1u);
  const std::uint32_t tie = 1u << (shift - 1u);
  if (rest > tie || (rest == tie && (units & 1u) != 0)) ++units;
  return static_cast<std::uint16_t>(sign | units);
}

float bfloat16_to_float(std::uint16_t value) {
  return std::bit_cast<float>(static_cast<std::uint32_t>(value) << 16);
}

std::uint16_t float_to_bfloat16(float value) {
  const std::uint32_t bits = std::bit_cast<std::uint32_t>(value);
  if ((bits & 0x7fffffffu) > 0x7f800000u) {
    const std::uint32_t quiet = bits >> 16 | 0x40u;
    return static_cast<std::uint16_t>(quiet);
  }
  return static_cast<std::uint16_t>((bits + 0x7fffu + (bits >> 16 & 1u)) >> 16);
}

}  // namespace leadsman::loaders
