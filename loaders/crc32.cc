#include "loaders/crc32.h"

#include <array>

#include "loaders/bytes.h"

namespace leadsman::loaders {
namespace {

// Eight bytes at a time (Kounavis & Berry 2005, "slicing-by-8"): table k says what a byte does to
// the checksum k bytes later.
using Tables = std::array<std::array<std::uint32_t, 256>, 8>;

constexpr Tables make_tables() {
  Tables tables{};
  for (std::uint32_t i = 0; i < 256; ++i) {
    std::uint32_t crc = i;
    for (int bit = 0; bit < 8; ++bit) crc = (crc & 1u) != 0 ? 0xedb88320u ^ (crc >> 1) : crc >> 1;
    tables[0][i] = crc;
  }
  for (std::size_t k = 1; k < 8; ++k) {
    for (std::size_t i = 0; i < 256; ++i) {
      const std::uint32_t crc = tables[k - 1][i];
      tables[k][i] = tables[0][crc & 0xffu] ^ (crc >> 8);
    }
  }
  return tables;
}

constexpr Tables kTables = make_tables();

}  // namespace

std::uint32_t crc32(std::span<const std::byte> bytes, std::uint32_t before) {
  std::uint32_t crc = ~before;
  std::size_t at = 0;
  for (; bytes.size() - at >= 8; at += 8) {
    const std::uint32_t low = load_le<std::uint32_t>(bytes.data() + at) ^ crc;
    const std::uint32_t high = load_le<std::uint32_t>(bytes.data() + at + 4);
    crc = kTables[7][low & 0xffu] ^ kTables[6][low >> 8 & 0xffu] ^ kTables[5][low >> 16 & 0xffu] ^
          kTables[4][low >> 24] ^ kTables[3][high & 0xffu] ^ kTables[2][high >> 8 & 0xffu] ^
          kTables[1][high >> 16 & 0xffu] ^ kTables[0][high >> 24];
  }
  for (; at < bytes.size(); ++at) {
    crc = kTables[0][(crc ^ std::to_integer<std::uint32_t>(bytes[at])) & 0xffu] ^ (crc >> 8);
  }
  return ~crc;
}

}  // namespace leadsman::loaders
