// The checksum of zip, gzip and PNG: CRC-32, polynomial 0xedb88320 reflected (ISO 3309).
#pragma once

#include <cstddef>
#include <cstdint>
#include <span>

namespace leadsman::loaders {

/// Of `bytes` following others whose checksum is `before` (0: none).
std::uint32_t crc32(std::span<const std::byte> bytes, std::uint32_t before = 0);

}  // namespace leadsman::loaders
