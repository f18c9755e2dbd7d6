// The header of an NPY array: magic, version, and a Python dictionary of three keys.
#pragma once

#include <cstddef>
#include <optional>
#include <span>
#include <string>

#include "leadsman/shape.h"
#include "loaders/element_type.h"

namespace leadsman::loaders {

struct NpyHeader {
  ArrayLayout layout;
  std::int64_t data_bytes = 0;   ///< what type and shape need
  std::size_t header_bytes = 0;  ///< where the data begin
};

/// No header is read that is longer than this (NumPy's own are 128 bytes for plain arrays).
inline constexpr std::size_t kMaxNpyHeaderBytes = std::size_t{1} << 16;

/// Bytes that the header takes, magic included, told from its first kNpyPrefixBytes bytes. Throws
/// Error(kInput) when they are not an NPY header of version 1.0, 2.0 or 3.0, or a longer one.
inline constexpr std::size_t kNpyPrefixBytes = 12;
std::size_t npy_header_bytes(std::span<const std::byte> prefix);

/// `header` is the whole header, npy_header_bytes() long. Throws Error(kInput) on anything but a
/// plain array of numbers or booleans of at most 8 bytes each.
NpyHeader parse_npy_header(std::span<const std::byte> header);

/// Header of a float32 array in C order, byte for byte as NumPy writes it.
std::string format_npy_header(const Shape& shape);

}  // namespace leadsman::loaders
