#include <string>
#include <utility>
#include <vector>

#include <gtest/gtest.h>

#include "leadsman/bundle.h"
#include "tests/support/files.h"

namespace leadsman {
namespace {

using testing::input_error;
using Labels = std::vector<std::string>;

TEST(Labels, AreReadLineByLine) {
  const std::vector<std::pair<std::string, Labels>> cases = {
      {"", {}},
      {"\n\n", {}},
      {"round\nsquare\n", {"round", "square"}},
      {"round\nsquare", {"round", "square"}},
      {"round\r\nsquare\r\n\r\n", {"round", "square"}},
      {"\xef\xbb\xbfround\n", {"round"}},
      {"two words, and a comma\n  \n\n", {"two words, and a comma"}},
      {"Kn\xc3\xb6pfe\nround\nround\n", {"Kn\xc3\xb6pfe", "round", "round"}},
      {std::string(1024, 'x') + "\n", {std::string(1024, 'x')}},
  };
  for (const auto& [text, labels] : cases) EXPECT_EQ(parse_labels(text, "labels.txt"), labels);
}

TEST(Labels, SayWhichLineIsWrong) {
  const std::vector<std::pair<std::string, std::string>> cases = {
      {"a\n\nb\n", "line 2: is blank, and labels follow it"},
      {"\na\n", "line 1: is blank, and labels follow it"},
      {"a\n \n\t\nb\n", "line 2: is blank, and labels follow it"},
      {"a\nKn\xf6pfe\n", "line 2: is not UTF-8 from byte 3: 'Kn\\xf6pfe'"},
      {"a\nb\tc\n", "line 2: a control character in 'b\\x09c'"},
      {"\x1b[31mred\n", "line 1: a control character in '\\x1b[31mred'"},
      {"a\rb\n", "line 1: a control character in 'a\\x0db'"},
      {std::string("a\0b\n", 4), "line 1: a control character in 'a\\x00b'"},
      {std::string(1025, 'x'), "line 1: a label of 1025 bytes; at most 1024 are read"},
  };
  for (const auto& [text, message] : cases) {
    EXPECT_EQ(input_error([&text = text] { parse_labels(text, "labels.txt"); }),
              "labels.txt: " + message);
  }
  std::string many;
  for (int i = 0; i <= 1'000'000; ++i) many += "x\n";
  EXPECT_EQ(input_error([&] { parse_labels(many, "labels.txt"); }),
            "labels.txt: holds more than 1000000 labels");
  EXPECT_EQ(input_error([&] { parse_labels(std::string((16 << 20) + 1, '\n'), "labels.txt"); }),
            "labels.txt: holds 16777217 bytes, at most 16777216 are read");
}

}  // namespace
}  // namespace leadsman
