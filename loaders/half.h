// IEEE 754 half precision (binary16) and bfloat16 to and from float32.
//
// To float is exact. From float rounds to the nearest value, ties to even; what is too big becomes
// infinite, and subnormals are kept. Payloads of NaNs are carried over as far as they fit, and a
// NaN stays a NaN.
#pragma once

#include <cstdint>

namespace leadsman::loaders {

float half_to_float(std::uint16_t half);
std::uint16_t float_to_half(float value);

float bfloat16_to_float(std::uint16_t value);
std::uint16_t float_to_bfloat16(float value);

}  // namespace leadsman::loaders
