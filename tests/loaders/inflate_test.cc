#include "loaders/inflate.h"

#include <string>
#include <string_view>
#include <vector>

#include <gtest/gtest.h>

#include "loaders/crc32.h"
#include "tests/support/files.h"

namespace leadsman::loaders {
namespace {

using leadsman::testing::input_error;

std::string from_hex(std::string_view hex) {
  std::string bytes;
  for (std::size_t i = 0; i + 1 < hex.size(); i += 2) {
    bytes += static_cast<char>(std::stoi(std::string(hex.substr(i, 2)), nullptr, 16));
  }
  return bytes;
}

std::span<const std::byte> bytes_of(const std::string& text) {
  return std::as_bytes(std::span(text));
}

std::string unpacked(const std::string& packed, std::size_t size) {
  std::string text(size, '?');
  inflate(bytes_of(packed), std::as_writable_bytes(std::span(text)));
  return text;
}

// The check value of CRC-32 in most descriptions of it, and Python's zlib.crc32.
TEST(Crc32, EqualsKnownValues) {
  EXPECT_EQ(crc32({}), 0u);
  EXPECT_EQ(crc32(bytes_of("123456789")), 0xcbf43926u);
  EXPECT_EQ(crc32(bytes_of("buttons, buttons, buttons")), 0x25077017u);
  EXPECT_EQ(crc32(bytes_of(std::string(1000, 'a'))), 0x9a38da03u);
}

TEST(Crc32, GoesOnFromAnyByte) {
  const std::string text = "the checksum of the whole is that of its parts, one after the other";
  const std::uint32_t whole = crc32(bytes_of(text));
  for (std::size_t cut = 0; cut <= text.size(); ++cut) {
    const auto bytes = bytes_of(text);
    EXPECT_EQ(crc32(bytes.subspan(cut), crc32(bytes.first(cut))), whole) << cut;
  }
}

// Packed by zlib 1.2.13 (Python's zlib, raw): all three kinds of blocks.
TEST(Inflate, UnpacksWhatZlibPacked) {
  EXPECT_EQ(unpacked(from_hex("0300"), 0), "");
  EXPECT_EQ(unpacked(from_hex("4b2a2d29c9cf2bd6514842630000"), 25), "buttons, buttons, buttons");
  EXPECT_EQ(unpacked(from_hex("010300fcff616263"), 3), "abc");
  EXPECT_EQ(unpacked(from_hex("4b4c1c05a360140c770000"), 1000), std::string(1000, 'a'));
}

TEST(Inflate, GivesTheStartOfAStream) {
  const std::string packed = from_hex("4b4c1c05a360140c770000");
  for (const std::size_t size : {0u, 1u, 2u, 300u, 999u, 1000u}) {
    std::string text(size, '?');
    EXPECT_EQ(inflate_start(bytes_of(packed), std::as_writable_bytes(std::span(text))), size);
    EXPECT_EQ(text, std::string(size, 'a'));
  }
  std::string text(1100, '?');
  EXPECT_EQ(inflate_start(bytes_of(packed), std::as_writable_bytes(std::span(text))), 1000u);
}

TEST(Inflate, RefusesDamagedStreams) {
  struct Case {
    const char* what;
    const char* packed;
    std::size_t size;
  };
  const std::vector<Case> cases = {
      {"nothing", "", 0},
      {"cut short", "4b2a2d29c9cf2bd65148", 25},
      {"more bytes than wanted", "010300fcff616263", 2},
      {"fewer bytes than wanted", "010300fcff616263", 4},
      {"bytes after the end", "010300fcff61626300", 3},
      {"a run longer than wanted", "4b4c1c05a360140c770000", 999},
      {"block kind 3", "07", 0},
      {"a stored length that is not repeated", "010300fdff616263", 3},
      {"a stored block cut short", "010300fcff6162", 3},
      // Fixed codes: a match of 3 at distance 1 with nothing before it (bits 1 01, 0000001, 00000).
      {"a distance before the start", "030200", 3},
      // Fixed codes: distance symbol 30 after one literal (bits 1 01, 10010001, 0000001, 11110).
      {"a distance that does not exist", "4b047800", 4},
      {"31 distances", "05fe0000", 0},  // hdist = 30
      // Dynamic codes whose code-length code has three words of one bit.
      {"an oversubscribed code", "05004092000000000000", 0},
  };
  for (const Case& bad : cases) {
    EXPECT_EQ(input_error([&] { unpacked(from_hex(bad.packed), bad.size); }),
              "the deflated bytes are damaged")
        << bad.what;
  }
}

}  // namespace
}  // namespace leadsman::loaders
