// Folders and files for tests, and the messages of errors.
#pragma once

#include <cstddef>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <functional>
#include <iterator>
#include <stdexcept>
#include <string>
#include <string_view>

#include <gtest/gtest.h>
#include <unistd.h>

#include "leadsman/error.h"

namespace leadsman::testing {

/// An empty folder that goes with its owner.
class ScratchFolder {
 public:
  ScratchFolder() : path_(std::filesystem::temp_directory_path() / "leadsman-XXXXXX") {
    if (::mkdtemp(path_.data()) == nullptr) throw std::runtime_error("no temporary folder");
  }
  ~ScratchFolder() {
    std::error_code ignored;
    std::filesystem::permissions(path_, std::filesystem::perms::owner_all, ignored);
    std::filesystem::remove_all(path_, ignored);
  }
  ScratchFolder(const ScratchFolder&) = delete;
  ScratchFolder& operator=(const ScratchFolder&) = delete;

  const std::string& path() const { return path_; }
  std::string operator/(std::string_view name) const { return path_ + "/" + std::string(name); }
  /// Names of what is in it.
  std::size_t count() const {
    return static_cast<std::size_t>(std::distance(std::filesystem::directory_iterator(path_),
                                                  std::filesystem::directory_iterator()));
  }

 private:
  std::string path_;
};

inline void write_file(const std::string& path, std::string_view bytes) {
  std::ofstream file(path, std::ios::binary);
  file.write(bytes.data(), static_cast<std::streamsize>(bytes.size()));
  if (!file.flush()) throw std::runtime_error("cannot write " + path);
}

inline std::string read_file(const std::string& path) {
  std::ifstream file(path, std::ios::binary);
  if (!file) throw std::runtime_error("cannot read " + path);
  return {std::istreambuf_iterator<char>(file), std::istreambuf_iterator<char>()};
}

/// What `action` says when it throws an Error of this kind; a test failure and "" when it does not.
inline std::string message_of(ErrorKind kind, const std::function<void()>& action) {
  try {
    action();
  } catch (const Error& error) {
    EXPECT_EQ(error.kind(), kind) << error.what();
    return error.what();
  } catch (const std::exception& error) {
    ADD_FAILURE() << "not an Error: " << error.what();
    return "";
  }
  ADD_FAILURE() << "nothing was thrown";
  return "";
}
inline std::string input_error(const std::function<void()>& action) {
  return message_of(ErrorKind::kInput, action);
}
inline std::string usage_error(const std::function<void()>& action) {
  return message_of(ErrorKind::kUsage, action);
}

}  // namespace leadsman::testing
