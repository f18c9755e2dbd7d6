// Reading pictures: equal to Pillow 9.4 (with libjpeg-turbo 2.1.5), byte for byte, for every kind.
#include "leadsman/picture.h"

#include <fstream>
#include <thread>

#include <gtest/gtest.h>
#include <sys/stat.h>

#include "leadsman/error.h"
#include "tests/loaders/picture_cases.h"
#include "tests/support/files.h"

namespace leadsman {
namespace {

namespace fs = std::filesystem;
using testing::ScratchFolder;
using testing::pictures::all_picture_cases;
using testing::pictures::expect_same_picture;
using testing::pictures::file_bytes;
using testing::pictures::stored_pictures;

// Outside check: Image.open(...).convert("RGB") and ImageOps.exif_transpose of Pillow 9.4.
TEST(Picture, IsWhatPillowReads) {
  for (const auto& cases : all_picture_cases()) {
    const auto decodes = cases.of("decode");
    EXPECT_GE(decodes.size(), 80u);
    for (const auto& c : decodes) {
      SCOPED_TRACE(c.text());
      const Orientation orientation =
          c.words.at(1) == "exif" ? Orientation::kExif : Orientation::kAsStored;
      const std::int64_t height = c.number(2);
      const std::int64_t width = c.number(3);
      expect_same_picture(read_picture(c.picture, orientation), height, width,
                          cases.bytes(c.number(4), height * width * 3));
    }
  }
}

// All eight, against their definition (EXIF 2.3, tag 0x0112) written out on a 3 x 2 picture.
TEST(Picture, OrientationTurnsEachPixelToItsPlace) {
  struct Case {
    int value;
    std::int64_t width;
    const char* pixels;  // of "abc" over "def"
  };
  const Case cases[] = {{1, 3, "abcdef"}, {2, 3, "cbafed"}, {3, 3, "fedcba"}, {4, 3, "defabc"},
                        {5, 2, "adbecf"}, {6, 2, "daebfc"}, {7, 2, "fcebda"}, {8, 2, "cfbead"}};
  // exif_N.png of the stored pictures has N in its eXIf chunk; here only that chunk counts.
  for (const Case& c : cases) {
    const Picture stored =
        read_picture(stored_pictures() / ("exif_" + std::to_string(c.value) + ".png"));
    const Picture turned = read_picture(
        stored_pictures() / ("exif_" + std::to_string(c.value) + ".png"), Orientation::kExif);
    ASSERT_EQ(stored.width, 7);
    ASSERT_EQ(turned.width, c.width == 3 ? 7 : 5);
    // Corners show the turn: a, c, d, f are the corners of the stored picture.
    const auto corner = [](const Picture& p, bool right, bool bottom) {
      const std::int64_t at =
          ((bottom ? p.height - 1 : 0) * p.width + (right ? p.width - 1 : 0)) * 3;
      return std::vector<std::uint8_t>(p.rgb.begin() + at, p.rgb.begin() + at + 3);
    };
    const auto stored_corner = [&](char name) {
      return corner(stored, name == 'c' || name == 'f', name == 'd' || name == 'f');
    };
    const std::string pixels = c.pixels;
    const auto w = static_cast<std::size_t>(c.width);
    EXPECT_EQ(corner(turned, false, false), stored_corner(pixels.front())) << c.value;
    EXPECT_EQ(corner(turned, true, false), stored_corner(pixels[w - 1])) << c.value;
    EXPECT_EQ(corner(turned, false, true), stored_corner(pixels[6 - w])) << c.value;
    EXPECT_EQ(corner(turned, true, true), stored_corner(pixels.back())) << c.value;
  }
}

TEST(Picture, DecodesFromMemoryAsFromAFile) {
  const fs::path path = stored_pictures() / "jpeg_420.jpg";
  const Picture from_file = read_picture(path);
  const Picture from_memory = decode_picture(file_bytes(path), "memory");
  EXPECT_EQ(from_memory.rgb, from_file.rgb);
  EXPECT_EQ(from_memory.width, from_file.width);
}

TEST(Picture, ReadsPipes) {
  const ScratchFolder folder;
  const fs::path pipe = folder / "pipe";
  ASSERT_EQ(::mkfifo(pipe.c_str(), 0600), 0);
  const auto bytes = file_bytes(stored_pictures() / "png_rgb8.png");
  std::thread writer([&] {
    std::ofstream(pipe, std::ios::binary)
        .write(reinterpret_cast<const char*>(bytes.data()),
               static_cast<std::streamsize>(bytes.size()));
  });
  const Picture picture = read_picture(pipe);
  writer.join();
  EXPECT_EQ(picture.rgb, read_picture(stored_pictures() / "png_rgb8.png").rgb);
}

TEST(Picture, DecodesOnSeveralThreadsAtOnce) {
  const auto files = testing::pictures::stored_picture_files();
  std::vector<Picture> expected;
  for (const auto& file : files) expected.push_back(read_picture(file));
  std::vector<int> wrong(4, 0);
  std::vector<std::thread> threads;
  for (std::size_t t = 0; t < wrong.size(); ++t) {
    threads.emplace_back([&, t] {
      for (std::size_t i = 0; i < files.size(); ++i) {
        const std::size_t k = (i + t * 17) % files.size();
        if (read_picture(files[k]).rgb != expected[k].rgb) ++wrong[t];
      }
    });
  }
  for (std::thread& thread : threads) thread.join();
  EXPECT_EQ(wrong, std::vector<int>(4, 0));
}

void expect_input_error(const fs::path& path, const PictureLimits& limits,
                        const std::string& part) {
  const std::string message =
      testing::input_error([&] { read_picture(path, Orientation::kAsStored, limits); });
  EXPECT_EQ(message.rfind(path.string() + ": ", 0), 0u) << message;
  EXPECT_NE(message.find(part), std::string::npos) << message;
}

TEST(Picture, LimitsAreExact) {
  // 23 x 17 pixels, of every kind.
  for (const char* name : {"png_rgb8.png", "bmp_24.bmp", "pnm_p6.ppm", "png_interlaced_rgb8.png"}) {
    const fs::path path = stored_pictures() / name;
    const auto size = static_cast<std::int64_t>(fs::file_size(path));
    PictureLimits limits{23, 23 * 17 * 3, size};
    EXPECT_EQ(read_picture(path, Orientation::kAsStored, limits).width, 23);
    expect_input_error(path, {22, 23 * 17 * 3, size}, "limit of 22 a side");
    expect_input_error(path, {23, 23 * 17 * 3 - 1, size}, "limit of 1172 bytes");
    expect_input_error(path, {23, 23 * 17 * 3, size - 1}, "longer than the limit");
  }
  const fs::path jpeg = stored_pictures() / "jpeg_420.jpg";  // 27 x 21
  expect_input_error(jpeg, {26, 1 << 20, 1 << 20}, "27 x 21");
  expect_input_error(jpeg, {27, 27 * 21 * 3 - 1, 1 << 20}, "27 x 21");
  EXPECT_EQ(read_picture(jpeg, Orientation::kAsStored, {27, 27 * 21 * 3, 1 << 20}).height, 21);
}

TEST(WritePng, ReadsBackEqual) {
  const ScratchFolder folder;
  const fs::path path = folder / "sheet.png";
  for (const auto& [width, height] : {std::pair{1, 1}, {3, 2}, {257, 5}, {40, 300}}) {
    Picture picture{width, height, {}};
    std::uint32_t state = 7;
    for (int i = 0; i < width * height * 3; ++i) {
      state = state * 1664525u + 1013904223u;
      picture.rgb.push_back(static_cast<std::uint8_t>(i % 50 < 25 ? state >> 24 : 90));
    }
    write_png(path, picture);
    const Picture back = read_picture(path);
    EXPECT_EQ(back.width, picture.width);
    EXPECT_EQ(back.rgb, picture.rgb);
  }
  // Nothing but the picture is left in the folder.
  EXPECT_EQ(folder.count(), 1u);
}

TEST(WritePng, RefusesWhatCannotBeWritten) {
  const ScratchFolder folder;
  const std::string path = folder / "a.png";
  const Picture dot{1, 1, {1, 2, 3}};
  for (const std::string& bad : {folder / "none/a.png", folder.path()}) {
    EXPECT_NE(testing::input_error([&] { write_png(bad, dot); }).find(bad), std::string::npos);
  }
  for (const Picture& bad : {Picture{}, Picture{2, 1, {1, 2, 3}}, Picture{-1, -1, {1, 2, 3}}}) {
    EXPECT_NE(testing::usage_error([&] { write_png(path, bad); }).find(path), std::string::npos);
  }
  EXPECT_EQ(folder.count(), 0u);
}

}  // namespace
}  // namespace leadsman
