#include "pictures.h"

#include <algorithm>
#include <array>
#include <cctype>
#include <filesystem>
#include <iostream>

#include "leadsman/error.h"

namespace leadsman::cli {
namespace {

namespace fs = std::filesystem;

bool is_picture(const fs::path& path) {
  static constexpr std::array<std::string_view, 7> extensions{".jpg", ".jpeg", ".png", ".bmp",
                                                              ".ppm", ".pgm",  ".pnm"};
  std::string extension = path.extension().string();
  std::ranges::transform(extension, extension.begin(),
                         [](unsigned char c) { return static_cast<char>(std::tolower(c)); });
  return std::ranges::find(extensions, extension) != extensions.end();
}

void add_folder(const fs::path& folder, std::vector<std::string>& pictures) {
  std::error_code error;
  std::vector<std::string> found;
  for (fs::directory_iterator it(folder, error), end; !error && it != end; it.increment(error)) {
    if (is_picture(it->path()) && !it->is_directory()) found.push_back(it->path().string());
  }
  if (error) throw_input(folder.string() + ": " + error.message());
  if (found.empty()) throw_input(folder.string() + ": holds no JPEG, PNG, BMP or PNM file");
  std::ranges::sort(found);
  pictures.insert(pictures.end(), found.begin(), found.end());
}

}  // namespace

std::vector<std::string> expand_pictures(const std::vector<std::string>& arguments) {
  std::vector<std::string> pictures;
  for (const std::string& argument : arguments) {
    std::error_code error;
    if (argument == "-") {
      std::string line;
      while (std::getline(std::cin, line)) {
        if (!line.empty() && line.back() == '\r') line.pop_back();
        if (!line.empty()) pictures.push_back(line);
      }
    } else if (fs::is_directory(argument, error)) {
      add_folder(argument, pictures);
    } else {
      pictures.push_back(argument);
    }
  }
  if (pictures.empty()) throw_input("standard input names no picture");
  return pictures;
}

}  // namespace leadsman::cli
