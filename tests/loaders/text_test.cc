#include "loaders/text.h"

#include <string>
#include <utility>
#include <vector>

#include <gtest/gtest.h>

namespace leadsman::loaders {
namespace {

using namespace std::string_literals;

// Sequences from RFC 3629, section 3 and Unicode 15, table 3-7.
TEST(Text, FindsInvalidUtf8) {
  const std::vector<std::pair<std::string, int>> cases = {
      {"", -1},
      {"plain", -1},
      {"Kn\xc3\xb6pfe", -1},
      {"\xe2\x82\xac", -1},              // U+20AC
      {"\xf0\x9f\xa7\xb5", -1},          // U+1F9F5
      {"\xf4\x8f\xbf\xbf", -1},          // U+10FFFF
      {"\xed\x9f\xbf\xee\x80\x80", -1},  // either side of the surrogates
      {"a\x80", 1},                      // a continuation alone
      {"ab\xc3", 2},                     // cut short
      {"\xc0\xaf", 0},                   // overlong '/'
      {"\xc1\xbf", 0},
      {"\xe0\x9f\xbf", 0},      // overlong
      {"\xf0\x8f\xbf\xbf", 0},  // overlong
      {"\xed\xa0\x80", 0},      // U+D800, a surrogate
      {"\xf4\x90\x80\x80", 0},  // above U+10FFFF
      {"\xf5\x80\x80\x80", 0},
      {"\xff", 0},
      {"x\xe2\x82y", 1},
  };
  for (const auto& [text, expected] : cases) {
    const auto found = find_invalid_utf8(text);
    EXPECT_EQ(found ? static_cast<int>(*found) : -1, expected) << printable(text);
  }
}

TEST(Text, FindsControlCharacters) {
  EXPECT_FALSE(find_control_character("a b\xc3\x80"));
  EXPECT_EQ(find_control_character("ab\tc"), 2u);
  EXPECT_EQ(find_control_character("\x1b[31m"), 0u);
  EXPECT_EQ(find_control_character("ab\x7f"), 2u);
  EXPECT_EQ(find_control_character("a\xc2\x9b"), 1u);  // U+009B, which begins sequences too
  EXPECT_FALSE(find_control_character("\xc2\xa0"));
  EXPECT_EQ(find_control_character("a\0b"s), 1u);
}

TEST(Text, ShowsNothingThatUpsetsATerminal) {
  EXPECT_EQ(printable("plain \xc3\xb6"), "plain \xc3\xb6");
  EXPECT_EQ(printable("\x1b[31m\n\xff\0"s), "\\x1b[31m\\x0a\\xff\\x00");
  EXPECT_EQ(printable("a\xc2\x9b"), "a\\xc2\\x9b");
  EXPECT_EQ(printable("abcdef", 4), "abcd...");
  EXPECT_EQ(printable("abc\xc3\xb6", 4), "abc...");  // no half character
  EXPECT_EQ(in_quotes("x"), "'x'");
}

TEST(Text, HintsAtTheNearestName) {
  EXPECT_EQ(nearest_hint("strde", {"stride", "padding"}), "; nearest: 'stride'");
  EXPECT_EQ(nearest_hint("zzzzzz", {"stride", "padding"}), "");
  EXPECT_EQ(join({"a", "b", "c"}), "a, b, c");
}

}  // namespace
}  // namespace leadsman::loaders
