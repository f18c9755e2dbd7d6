// Pictures from outside that are broken, hostile or not pictures: each is an Error(kInput) that
// names the file, and nothing else happens. Run with -fsanitize=address,undefined to see that.
#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "leadsman/picture.h"
#include "tests/loaders/picture_builder.h"
#include "tests/support/files.h"

namespace leadsman {
namespace {

using namespace testing::pictures;  // NOLINT: the builder's words

const std::string kPngMagic = "\x89PNG\r\n\x1a\n";

std::string png_header(std::uint32_t width, std::uint32_t height, int depth = 8, int colour = 2,
                       int interlace = 0) {
  return chunk("IHDR", be32(width) + be32(height) + static_cast<char>(depth) +
                           static_cast<char>(colour) + std::string(2, '\0') +
                           static_cast<char>(interlace));
}

/// zlib with one stored block.
std::string zlib_stored(const std::string& body) {
  const auto size = static_cast<std::uint32_t>(body.size());
  return std::string("\x78\x01\x01", 3) + le32(size | (~size & 0xffff) << 16) + body + be32(0);
}

std::string png_of(const std::string& header, const std::string& middle) {
  return kPngMagic + header + middle + chunk("IEND", "");
}

std::string bmp_header(std::uint32_t width, std::uint32_t height, std::uint32_t bits,
                       std::uint32_t compression, std::uint32_t colours = 0) {
  return "BM" + le32(0) + le32(0) + le32(54) + le32(40) + le32(width) + le32(height) +
         le32(1 | bits << 16) + le32(compression) + le32(0) + le32(0) + le32(0) + le32(colours) +
         le32(0);
}

TEST(BrokenPicture, OtherKindsOfFile) {
  const char* unknown = "is not JPEG, PNG, BMP or PNM";
  expect_all_broken({
      {"empty", "", "is empty"},
      {"one byte", "P", unknown},
      {"GIF", "GIF89a\x01\x02\x03\x04\x05\x06", unknown},
      {"WebP", std::string("RIFF\x10\0\0\0WEBPVP8 ", 16), unknown},
      {"TIFF", std::string("II*\0\x08\0\0\0", 8), unknown},
      {"text", "a picture of a button", unknown},
      {"PAM", "P7\nWIDTH 2\n", unknown},
      {"float map", "Pf 1 1 1 abcd", unknown},
      {"PNM look-alike", "P5xyz", unknown},
      {"PNG with a mangled line end", "\x89PNG\n\x1a\n", unknown},
  });
}

TEST(BrokenPicture, Png) {
  const std::string dot = zlib_stored(std::string(4, '\0'));
  const std::string data = chunk("IDAT", dot);
  std::string flipped = stored("png_rgb8.png");
  flipped[60] = static_cast<char>(flipped[60] ^ 1);
  expect_all_broken({
      {"magic alone", kPngMagic, "cut short"},
      {"no header", png_of("", data), "header"},
      {"two headers", png_of(png_header(1, 1), png_header(1, 1) + data), "header"},
      {"header of 12 bytes", png_of(chunk("IHDR", std::string(12, 1)), data), "header"},
      {"width 0", png_of(png_header(0, 1), data), "no pixels"},
      {"height 0", png_of(png_header(1, 0), data), "no pixels"},
      {"65535 x 65535", png_of(png_header(65535, 65535), data), "limit of 32768 a side"},
      {"32768 x 32768", png_of(png_header(32768, 32768), data), "limit of 536870912 bytes"},
      {"2^32 - 1 wide", png_of(png_header(0xffffffff, 0xffffffff), data), "a side"},
      {"a large picture in 20 bytes", png_of(png_header(20000, 8000), data), "does not fill"},
      {"depth 3", png_of(png_header(1, 1, 3, 0), data), "does not know"},
      {"16-bit palette", png_of(png_header(1, 1, 16, 3), data), "does not know"},
      {"colour type 5", png_of(png_header(1, 1, 8, 5), data), "does not know"},
      {"interlacing 2", png_of(png_header(1, 1, 8, 2, 2), data), "does not know"},
      {"no palette", png_of(png_header(1, 1, 8, 3), data), "lacks its PNG palette"},
      {"palette of 4 bytes", png_of(png_header(1, 1, 8, 3), chunk("PLTE", "abcd") + data),
       "palette"},
      {"palette of 257", png_of(png_header(1, 1, 8, 3), chunk("PLTE", std::string(771, 1)) + data),
       "palette"},
      {"two palettes",
       png_of(png_header(1, 1, 8, 3), chunk("PLTE", "abc") + chunk("PLTE", "abc") + data),
       "palette"},
      {"no data", png_of(png_header(1, 1), ""), "does not fill"},
      {"empty data", png_of(png_header(1, 1), chunk("IDAT", "")), "does not fill"},
      {"data in two places", png_of(png_header(1, 1), data + chunk("tEXt", "a") + data),
       "two places"},
      {"not zlib", png_of(png_header(1, 1), chunk("IDAT", "abcdefgh")), "does not fill"},
      {"too little data", png_of(png_header(1, 2), data), "does not fill"},
      {"filter 7", png_of(png_header(1, 1), chunk("IDAT", zlib_stored(std::string("\7abc", 4)))),
       "damaged"},
      {"unknown critical chunk", png_of(png_header(1, 1), chunk("CgBI", "") + data), "extension"},
      {"no end", kPngMagic + png_header(1, 1) + data, "cut short"},
      {"chunk longer than the file",
       kPngMagic + png_header(1, 1) + be32(0xfffffff0) + "IDAT" + std::string(40, 'a'),
       "inside a PNG chunk"},
      {"a flipped bit", flipped, "checksum"},
  });
  // What the table is made of is sound: this one is read.
  EXPECT_EQ(error_of(to_bytes(png_of(png_header(1, 1), data))), "");
}

TEST(BrokenPicture, Bmp) {
  const std::string row(4096, '\x42');
  expect_all_broken({
      {"magic alone", "BM", "cut short"},
      {"header cut", bmp_header(2, 2, 24, 0).substr(0, 40), "cut short"},
      {"header of 41 bytes", patched(bmp_header(2, 2, 24, 0), le32(40), le32(41)) + row,
       "header of 41"},
      {"header of 2^32 - 1 bytes", patched(bmp_header(2, 2, 24, 0), le32(40), le32(0xffffffff)),
       "which is not read"},
      {"width 0", bmp_header(0, 2, 24, 0) + row, "no pixels"},
      {"height 0", bmp_header(2, 0, 24, 0) + row, "no pixels"},
      {"width -1", bmp_header(0xffffffff, 2, 24, 0) + row, "no pixels"},
      {"height -2^31", bmp_header(2, 0x80000000, 24, 0) + row, "a side"},
      {"width 2^31 - 1", bmp_header(0x7fffffff, 2, 24, 0) + row, "a side"},
      {"24 bits, all sides at the limit", bmp_header(32768, 5000, 24, 0) + row, "cut short"},
      {"run-length", bmp_header(2, 2, 8, 1) + row, "run-length"},
      {"compression 5", bmp_header(2, 2, 24, 5) + row, "compression 5"},
      {"13 bits", bmp_header(2, 2, 13, 0) + row, "13 bits"},
      {"masks unknown", bmp_header(2, 2, 32, 3) + le32(0xf0) + le32(0x0f) + le32(0xff00) + row,
       "layout"},
      {"masks with 8 bits",
       bmp_header(2, 2, 8, 3) + le32(0xff0000) + le32(0xff00) + le32(0xff) + row, "layout"},
      {"masks cut", bmp_header(2, 2, 32, 3) + le32(0xff0000), "cut short"},
      {"2^32 - 1 colours", bmp_header(2, 2, 8, 0, 0xffffffff) + row, "palette"},
      {"palette cut", bmp_header(2, 2, 8, 0, 60000) + row, "cut short"},
      {"pixels past the end", patched(bmp_header(2, 2, 24, 0), le32(54), le32(0xfffffff0)) + row,
       "cut short"},
  });
  EXPECT_EQ(error_of(to_bytes(bmp_header(2, 2, 24, 0) + row)), "");
}

TEST(BrokenPicture, Pnm) {
  expect_all_broken({
      {"magic alone", "P6", "not JPEG"},
      {"no numbers", "P6\n", "cut short"},
      {"letters", "P5 3 x 255\n123", "not a digit"},
      {"negative", "P5 -3 1 255\n123", "not a digit"},
      {"width 0", "P5 0 3 255\n", "no pixels"},
      {"height 0", "P4 3 0\n", "no pixels"},
      {"a number of 30 digits", "P5 111111111122222222223333333333 1 255\n1", "too large"},
      {"65535 x 65535", "P4 65535 65535\n", "a side"},
      {"30000 x 30000", "P4 30000 30000\n", "limit of 536870912 bytes"},
      {"a large picture without data", "P6 20000 8000 255\n", "cut short"},
      {"maximum 0", "P5 1 1 0\n1", "1..65535"},
      {"maximum 65536", "P5 1 1 65536\n12", "1..65535"},
      {"P5 cut", "P5 3 2 255\n12345", "cut short"},
      {"P6 cut", "P6 1 1 255\n12", "cut short"},
      {"P6 of 16 bits cut", "P6 1 1 256\n12345", "cut short"},
      {"P4 cut", "P4 9 2\nabc", "cut short"},
      {"P1 with a 2", "P1 2 1\n12", "neither 0 nor 1"},
      {"P1 cut", "P1 2 2\n101", "cut short"},
      {"P2 above its maximum", "P2 1 1 9\n10", "above its maximum"},
      {"P2 cut", "P2 3 1 9\n1 2  ", "cut short"},
      {"P3 cut in a comment", "P3 1 1 9\n1 2 # 3", "cut short"},
  });
}

TEST(BrokenPicture, Paths) {
  const testing::ScratchFolder folder;
  const auto message = [](const std::string& path) {
    return testing::input_error([&] { read_picture(path); });
  };
  const std::string none = folder / "none.png";
  EXPECT_EQ(message(none), none + ": no such file");
  EXPECT_EQ(message(folder.path()), folder.path() + ": is a folder, not a picture");
  EXPECT_NE(message(""), "");
  EXPECT_EQ(message("/dev/null"), "/dev/null: is empty");
  const std::string empty = folder / "empty.png";
  testing::write_file(empty, "");
  EXPECT_EQ(message(empty), empty + ": is empty");
}

}  // namespace
}  // namespace leadsman
