#include "tests/loaders/picture_cases.h"

#include <algorithm>
#include <cstdlib>
#include <cstring>
#include <fstream>
#include <sstream>
#include <stdexcept>

#include <gtest/gtest.h>

#include "tests/support/files.h"

namespace leadsman::testing::pictures {

namespace fs = std::filesystem;

fs::path stored_pictures() {
  return fs::path(LEADSMAN_SOURCE_DIR) / "tests/data/pictures";
}

std::vector<std::byte> file_bytes(const fs::path& path) {
  const std::string text = read_file(path.string());
  std::vector<std::byte> bytes(text.size());
  if (!text.empty()) std::memcpy(bytes.data(), text.data(), text.size());
  return bytes;
}

std::string PictureCase::text() const {
  std::string joined;
  for (const std::string& word : words) joined += word + " ";
  return joined;
}

std::vector<PictureCase> PictureCases::of(std::string_view kind) const {
  std::ifstream file(folder / "cases.txt");
  if (!file) throw std::runtime_error("no cases.txt in " + folder.string());
  std::vector<PictureCase> cases;
  for (std::string line; std::getline(file, line);) {
    std::istringstream stream(line);
    std::string first;
    stream >> first;
    if (first != kind) continue;
    PictureCase c;
    for (std::string word; stream >> word;) c.words.push_back(word);
    c.picture = folder / c.words.at(0);
    cases.push_back(c);
  }
  return cases;
}

std::span<const std::uint8_t> PictureCases::bytes(std::int64_t offset, std::int64_t count) const {
  if (offset < 0 || count < 0 || offset + count > static_cast<std::int64_t>(results.size())) {
    throw std::runtime_error("results.bin is too short in " + folder.string());
  }
  return {reinterpret_cast<const std::uint8_t*>(results.data()) + offset,
          static_cast<std::size_t>(count)};
}

std::vector<float> PictureCases::floats(std::int64_t offset, std::int64_t count) const {
  const auto raw = bytes(offset, count * 4);
  std::vector<float> values(static_cast<std::size_t>(count));
  std::memcpy(values.data(), raw.data(), raw.size());
  return values;
}

std::vector<PictureCases> all_picture_cases() {
  std::vector<fs::path> folders = {stored_pictures()};
  if (const char* more = std::getenv("LEADSMAN_PICTURE_CASES")) folders.emplace_back(more);
  std::vector<PictureCases> all;
  for (const fs::path& folder : folders) {
    all.push_back({folder, file_bytes(folder / "results.bin")});
  }
  return all;
}

Interpolation interpolation_named(const std::string& name) {
  if (name == "nearest") return Interpolation::kNearest;
  if (name == "bilinear") return Interpolation::kBilinear;
  if (name == "bicubic") return Interpolation::kBicubic;
  throw std::runtime_error("unknown interpolation " + name);
}

std::vector<fs::path> stored_picture_files() {
  std::vector<fs::path> files;
  for (const auto& entry : fs::directory_iterator(stored_pictures())) {
    const std::string kind = entry.path().extension().string();
    if (kind != ".txt" && kind != ".bin" && kind != ".md") files.push_back(entry.path());
  }
  std::sort(files.begin(), files.end());
  return files;
}

void expect_same_picture(const Picture& picture, std::int64_t height, std::int64_t width,
                         std::span<const std::uint8_t> expected) {
  ASSERT_EQ(picture.height, height);
  ASSERT_EQ(picture.width, width);
  ASSERT_EQ(picture.rgb.size(), expected.size());
  for (std::size_t i = 0; i < expected.size(); ++i) {
    ASSERT_EQ(int{picture.rgb[i]}, int{expected[i]})
        << "at row " << i / 3 / static_cast<std::size_t>(width) << ", column "
        << i / 3 % static_cast<std::size_t>(width) << ", channel " << i % 3;
  }
}

}  // namespace leadsman::testing::pictures
