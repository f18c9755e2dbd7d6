// Every stored picture cut short at every byte, with broken EXIF, and mutated by chance: it is
// read, or an Error(kInput) names it. Run with -fsanitize=address,undefined to see that nothing
// else happens.
#include <cstdlib>

#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "leadsman/picture.h"
#include "tests/loaders/picture_builder.h"
#include "tests/loaders/picture_cases.h"
#include "tests/support/random.h"

namespace leadsman {
namespace {

namespace fs = std::filesystem;
using namespace testing::pictures;  // NOLINT: the builder's words

constexpr PictureLimits kSmallLimits{4096, std::int64_t{4} << 20, std::int64_t{1} << 20};

// The first N bytes of a picture are no picture.
TEST(BrokenPicture, EveryTruncation) {
  int cuts = 0;
  for (const fs::path& file : stored_picture_files()) {
    SCOPED_TRACE(file.filename().string());
    const Bytes whole = file_bytes(file);
    const Picture picture = decode_picture(whole, "whole");
    const std::string magic = to_text(whole).substr(0, 2);
    for (std::size_t size = 0; size < whole.size(); ++size) {
      const Bytes start(whole.begin(), whole.begin() + static_cast<std::ptrdiff_t>(size));
      if (!error_of(start).empty()) {
        ++cuts;
        continue;
      }
      const Picture cut = decode_picture(start, "cut");
      // "12" cut to "1" is a number too.
      if (magic >= "P1" && magic <= "P3" && size + 4 > whole.size()) continue;
      // Else only what follows the picture may be missing: padding, or foreign bytes.
      EXPECT_EQ(cut.rgb, picture.rgb) << size << " of " << whole.size() << " bytes";
      EXPECT_TRUE(magic == "BM" || file.filename() == "jpeg_trailing.jpg" ||
                  (magic >= "P1" && magic <= "P3"))
          << size << " of " << whole.size() << " bytes";
    }
  }
  EXPECT_GT(cuts, 40000);
}

/// EXIF around one entry, little-endian.
std::string exif(std::uint32_t directory, const std::string& rest) {
  return "II" + std::string("*\0", 2) + le32(directory) + rest;
}

TEST(BrokenPicture, ExifThatDoesNotParseIsNone) {
  const auto entry = [](int kind, std::uint32_t count, std::uint32_t value) {
    return bytes_of({0x12, 0x01, kind, 0}) + le32(count) + le32(value);
  };
  const std::string one = bytes_of({1, 0});
  struct Case {
    const char* what;
    std::string tiff;
    bool turned;
  };
  const Case cases[] = {
      {"sound", exif(8, one + entry(3, 1, 6) + le32(0)), true},
      {"sound, without a next directory", exif(8, one + entry(3, 1, 6)), true},
      {"sound, as LONG", exif(8, one + entry(4, 1, 6) + le32(0)), true},
      {"next directory is itself", exif(8, one + entry(3, 1, 6) + le32(8)), true},
      {"empty", "", false},
      {"header alone", exif(8, ""), false},
      {"directory past the end", exif(0xfffffff0, one + entry(3, 1, 6)), false},
      {"directory at the very end", exif(26 - 4, one + entry(3, 1, 6)), false},
      {"directory is the header", exif(0, one + entry(3, 1, 6)), false},
      {"65535 entries, one there", exif(8, bytes_of({255, 255}) + entry(3, 1, 6)), true},
      {"entry cut", exif(8, (one + entry(3, 1, 6)).substr(0, 11)), false},
      {"value 0", exif(8, one + entry(3, 1, 0)), false},
      {"value 9", exif(8, one + entry(3, 1, 9)), false},
      {"as text", exif(8, one + entry(2, 1, 6)), false},
      {"two values", exif(8, one + entry(3, 2, 6)), false},
      {"2^32 - 1 values", exif(8, one + entry(3, 0xffffffff, 6)), false},
      {"other byte order", patched(exif(8, one + entry(3, 1, 6)), "II", "MM"), false},
      {"no byte order", patched(exif(8, one + entry(3, 1, 6)), "II", "IM"), false},
      {"magic 43", patched(exif(8, one + entry(3, 1, 6)), "*", "+"), false},
  };
  const std::string png = stored("scene.png");       // 37 x 29
  const std::string jpeg = stored("jpeg_grey.jpg");  // 27 x 21
  for (const Case& c : cases) {
    SCOPED_TRACE(c.what);
    const std::string with_chunk =
        patched(png, chunk("IEND", ""), chunk("eXIf", c.tiff)) + chunk("IEND", "");
    const Picture from_png = decode_picture(to_bytes(with_chunk), "png", Orientation::kExif);
    EXPECT_EQ(from_png.width, c.turned ? 29 : 37);
    const std::string body = std::string("Exif\0\0", 6) + c.tiff;
    const auto length = static_cast<int>(body.size()) + 2;
    const std::string with_segment = jpeg.substr(0, 2) +
                                     bytes_of({0xff, 0xe1, length >> 8, length & 255}) + body +
                                     jpeg.substr(2);
    const Picture from_jpeg = decode_picture(to_bytes(with_segment), "jpeg", Orientation::kExif);
    EXPECT_EQ(from_jpeg.width, c.turned ? 21 : 27);
  }
}

/// Recomputes the checksums of all chunks that are in place, so that damage gets past them.
void mend_checksums(Bytes& png) {
  std::size_t at = 8;
  while (png.size() >= 12 && at <= png.size() - 12) {
    std::size_t length = 0;
    for (std::size_t i = 0; i < 4; ++i) {
      length = length << 8 | std::to_integer<std::size_t>(png[at + i]);
    }
    if (length > png.size() - at - 12) return;
    const std::uint32_t crc = loaders::crc32(std::span(png).subspan(at + 4, length + 4));
    for (std::size_t i = 0; i < 4; ++i) {
      png[at + 8 + length + i] = static_cast<std::byte>(crc >> (24 - 8 * i) & 255);
    }
    at += length + 12;
  }
}

// Deterministic: one seed a file. LEADSMAN_MUTATIONS says how many a file gets.
TEST(BrokenPicture, MutationsAreReadOrRefused) {
  const char* wanted = std::getenv("LEADSMAN_MUTATIONS");
  const int count = wanted != nullptr ? std::atoi(wanted) : 60;
  const auto files = stored_picture_files();
  int read = 0;
  int refused = 0;
  std::uint64_t seed = 0;
  for (const fs::path& file : files) {
    SCOPED_TRACE(file.filename().string());
    const Bytes whole = file_bytes(file);
    testing::Random random(++seed);
    const auto below = [&](std::size_t bound) {
      return static_cast<std::size_t>(random.bits() % bound);
    };
    for (int i = 0; i < count; ++i) {
      Bytes bytes = whole;
      const std::size_t changes = 1 + below(6);
      for (std::size_t k = 0; k < changes && !bytes.empty(); ++k) {
        // Mostly near the start, where the headers are.
        const std::size_t at =
            below(below(3) == 0 ? bytes.size() : std::min<std::size_t>(bytes.size(), 700));
        const auto place = bytes.begin() + static_cast<std::ptrdiff_t>(at);
        switch (below(8)) {
          case 0:
            *place = static_cast<std::byte>(below(256));
            break;
          case 1:
            *place ^= static_cast<std::byte>(1u << below(8));
            break;
          case 2:
            *place = static_cast<std::byte>(below(2) == 0 ? 0 : 255);
            break;
          case 3:
            *place = static_cast<std::byte>(std::to_integer<unsigned>(*place) + 1);
            break;
          case 4:
            bytes.insert(place, static_cast<std::byte>(below(256)));
            break;
          case 5:
            bytes.erase(place, place + static_cast<std::ptrdiff_t>(
                                           std::min(1 + below(4), bytes.size() - at)));
            break;
          case 6: {  // a piece again, elsewhere
            const Bytes piece(place, place + static_cast<std::ptrdiff_t>(
                                                 std::min(1 + below(60), bytes.size() - at)));
            bytes.insert(bytes.begin() + static_cast<std::ptrdiff_t>(below(bytes.size())),
                         piece.begin(), piece.end());
            break;
          }
          default: {  // a number
            const std::size_t value = below(65536);
            for (std::size_t b = 0; b < 2 && at + b < bytes.size(); ++b) {
              bytes[at + b] = static_cast<std::byte>(value >> 8 * b & 255);
            }
          }
        }
      }
      if (file.extension() == ".png" && below(4) != 0) mend_checksums(bytes);
      const Orientation orientation = below(2) == 0 ? Orientation::kAsStored : Orientation::kExif;
      (error_of(bytes, orientation, kSmallLimits).empty() ? read : refused) += 1;
    }
  }
  // Both must happen, or the mutations test nothing.
  EXPECT_GT(read, static_cast<int>(files.size()) * count / 20);
  EXPECT_GT(refused, static_cast<int>(files.size()) * count / 4);
}

}  // namespace
}  // namespace leadsman
