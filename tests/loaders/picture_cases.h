// Pictures and what Pillow and torchvision make of them (make_picture_cases.py).
#pragma once

#include <cstdint>
#include <filesystem>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "leadsman/preprocess.h"

namespace leadsman::testing::pictures {

/// tests/data/pictures.
std::filesystem::path stored_pictures();

/// One line of cases.txt; `words` follow its kind.
struct PictureCase {
  std::filesystem::path picture;
  std::vector<std::string> words;  // from the picture's name on

  std::string text() const;
  std::int64_t number(std::size_t index) const { return std::stoll(words.at(index)); }
};

/// A folder with its expected results.
struct PictureCases {
  std::filesystem::path folder;
  std::vector<std::byte> results;

  /// Lines of one kind: "decode", "resize" or "preprocess".
  std::vector<PictureCase> of(std::string_view kind) const;
  std::span<const std::uint8_t> bytes(std::int64_t offset, std::int64_t count) const;
  std::vector<float> floats(std::int64_t offset, std::int64_t count) const;
};

/// The stored cases, and those of the folder that LEADSMAN_PICTURE_CASES names when it is set.
std::vector<PictureCases> all_picture_cases();

Interpolation interpolation_named(const std::string& name);
std::vector<std::byte> file_bytes(const std::filesystem::path& path);
/// All pictures of tests/data/pictures, in order of their names.
std::vector<std::filesystem::path> stored_picture_files();

/// Fails, saying where, unless sizes and bytes agree.
void expect_same_picture(const Picture& picture, std::int64_t height, std::int64_t width,
                         std::span<const std::uint8_t> expected);

}  // namespace leadsman::testing::pictures
