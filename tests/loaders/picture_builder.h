// Builds picture files by hand, broken or not, and says how reading them ends.
#pragma once

#include <algorithm>
#include <initializer_list>
#include <stdexcept>
#include <string>
#include <string_view>
#include <vector>

#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "leadsman/picture.h"
#include "loaders/crc32.h"
#include "tests/loaders/picture_cases.h"

namespace leadsman::testing::pictures {

using Bytes = std::vector<std::byte>;

inline Bytes to_bytes(std::string_view text) {
  const auto* first = reinterpret_cast<const std::byte*>(text.data());
  return {first, first + text.size()};
}

inline std::string to_text(const Bytes& bytes) {
  return {reinterpret_cast<const char*>(bytes.data()), bytes.size()};
}

inline std::string stored(const char* name) {
  return to_text(file_bytes(stored_pictures() / name));
}

inline std::string be32(std::uint32_t value) {
  std::string text;
  for (int shift = 24; shift >= 0; shift -= 8) text += static_cast<char>(value >> shift & 255);
  return text;
}

inline std::string le32(std::uint32_t value) {
  std::string text = be32(value);
  std::reverse(text.begin(), text.end());
  return text;
}

inline std::string chunk(const std::string& name, const std::string& body) {
  return be32(static_cast<std::uint32_t>(body.size())) + name + body +
         be32(loaders::crc32(to_bytes(name + body)));
}

/// `text` with what `from` first matches replaced; the match must be there.
inline std::string patched(std::string text, const std::string& from, const std::string& to) {
  const std::size_t at = text.find(from);
  if (at == std::string::npos) {
    std::string shown;
    for (const char c : from) shown += std::to_string(static_cast<unsigned char>(c)) + " ";
    throw std::runtime_error("nothing to patch: " + shown);
  }
  return text.replace(at, from.size(), to);
}

inline std::string bytes_of(std::initializer_list<int> values) {
  std::string text;
  for (const int value : values) text += static_cast<char>(value);
  return text;
}

struct Broken {
  const char* what;
  std::string bytes;
  const char* message;
};

/// Empty when the picture was read.
inline std::string error_of(const Bytes& bytes, Orientation orientation = Orientation::kAsStored,
                            const PictureLimits& limits = {}) {
  try {
    decode_picture(bytes, "some/name.jpg", orientation, limits);
    return "";
  } catch (const Error& error) {
    EXPECT_EQ(error.kind(), ErrorKind::kInput) << error.what();
    const std::string message = error.what();
    EXPECT_EQ(message.rfind("some/name.jpg: ", 0), 0u) << message;
    return message;
  }
}

inline void expect_all_broken(const std::vector<Broken>& cases) {
  for (const Broken& c : cases) {
    SCOPED_TRACE(c.what);
    const std::string message = error_of(to_bytes(c.bytes));
    EXPECT_NE(message.find(c.message), std::string::npos) << "got: " << message;
  }
}

}  // namespace leadsman::testing::pictures
