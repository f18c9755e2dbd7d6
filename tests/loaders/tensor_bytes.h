// Bytes of small tensor files, right and wrong, for tests.
#pragma once

#include <cstdint>
#include <cstring>
#include <string>
#include <string_view>

namespace leadsman::testing {

template <typename T>
std::string le(T value) {
  std::string bytes(sizeof(T), '\0');
  std::memcpy(bytes.data(), &value, sizeof(T));
  return bytes;
}

/// Header and as many zero bytes of data.
inline std::string safetensors_bytes(std::string_view header, std::size_t data_bytes) {
  return le(static_cast<std::uint64_t>(header.size())) + std::string(header) +
         std::string(data_bytes, '\0');
}

/// Version 1.0, as it stands: no padding is added.
inline std::string npy_bytes(std::string_view dict, std::size_t data_bytes) {
  return "\x93NUMPY\x01" + std::string(1, '\0') + le(static_cast<std::uint16_t>(dict.size())) +
         std::string(dict) + std::string(data_bytes, '\0');
}

/// `bytes` with those at `at` replaced.
inline std::string patched(std::string bytes, std::size_t at, std::string_view by) {
  return bytes.replace(at, by.size(), by);
}

}  // namespace leadsman::testing
