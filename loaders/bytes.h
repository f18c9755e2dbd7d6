// Little-endian numbers in files. Files here are little-endian, and so is every machine that this
// library is built for; the numbers need no alignment.
#pragma once

#include <bit>
#include <cstddef>
#include <cstdint>
#include <cstring>
#include <string>
#include <type_traits>

namespace leadsman::loaders {

static_assert(std::endian::native == std::endian::little,
              "tensor files are read in place as little-endian numbers");

template <typename T>
T load_le(const std::byte* from) {
  static_assert(std::is_trivially_copyable_v<T>);
  T value;
  std::memcpy(&value, from, sizeof(T));
  return value;
}

template <typename T>
void append_le(std::string& to, T value) {
  static_assert(std::is_integral_v<T>);
  char bytes[sizeof(T)];
  std::memcpy(bytes, &value, sizeof(T));
  to.append(bytes, sizeof(T));
}

}  // namespace leadsman::loaders
