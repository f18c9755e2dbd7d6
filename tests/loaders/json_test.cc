#include <string>
#include <utility>
#include <vector>

#include <gtest/gtest.h>

#include "loaders/json_text.h"
#include "tests/support/files.h"

namespace leadsman::loaders {
namespace {

using leadsman::testing::input_error;

TEST(ParseJson, ReadsWhatIsValid) {
  const Json json =
      parse_json("\xef\xbb\xbf{\"a\": [1, -2, 2.5e-1, true, null, \"\\u00f6\\n\"]}\n");
  EXPECT_EQ(json.dump(), "{\"a\":[1,-2,0.25,true,null,\"\xc3\xb6\\n\"]}");
  EXPECT_EQ(parse_json("[[[[[[[[[[[[[[[[]]]]]]]]]]]]]]]]").dump().size(), 32u);  // 16 deep
}

TEST(ParseJson, SaysWhereSyntaxIsWrong) {
  const std::vector<std::pair<std::string, std::string>> cases = {
      {"",
       "line 1, column 1: not valid JSON: while parsing value - unexpected end of input; "
       "expected '[', '{', or a literal"},
      {"{\n  \"a\": 1,\n  \"b\" 2\n}",
       "line 3, column 7: not valid JSON: while parsing object "
       "separator - unexpected number literal; expected ':'"},
      {"{\"\xc3\xb6\xc3\xb6\": x}",
       "line 1, column 8: not valid JSON: while parsing value - "
       "invalid literal; last read: '\"\xc3\xb6\xc3\xb6\": x'"},
      {"[1,]",
       "line 1, column 4: not valid JSON: while parsing value - unexpected ']'; expected "
       "'[', '{', or a literal"},
      {"[NaN]",
       "line 1, column 2: not valid JSON: while parsing value - invalid literal; last "
       "read: '[N'"},
      {"[Infinity]",
       "line 1, column 2: not valid JSON: while parsing value - invalid literal; "
       "last read: '[I'"},
      {"[1e999]", "line 1, column 6: not valid JSON: number overflow parsing '1e999'"},
      {"[-1e999]", "line 1, column 7: not valid JSON: number overflow parsing '-1e999'"},
      {"[01]",
       "line 1, column 3: not valid JSON: while parsing array - unexpected number "
       "literal; expected ']'"},
      {"[1] // note",
       "line 1, column 5: not valid JSON: while parsing value - invalid literal; "
       "last read: '1] /'; expected end of input"},
      {"[1] [2]",
       "line 1, column 5: not valid JSON: while parsing value - unexpected '['; "
       "expected end of input"},
      {"\"a\nb\"",
       "line 1, column 3: not valid JSON: while parsing value - invalid string: "
       "control character U+000A (LF) must be escaped to \\u000A or \\n; last read: "
       "'\"a<U+000A>'"},
      {"\"\\ud800\"",
       "line 1, column 8: not valid JSON: while parsing value - invalid string: "
       "surrogate U+D800..U+DBFF must be followed by U+DC00..U+DFFF; last read: "
       "'\"\\ud800\"'"},
      {std::string("[1]\0[", 5), "line 1, column 4: not valid JSON: a zero byte"},
      {"{\"a\": {\"b/c\": [{\"d\": 1, \"d\": 2}]}}", "/a/b~1c/0: the key 'd' is given twice"},
      {"{\"a\": 1, \"a\": 2}", "/: the key 'a' is given twice"},
      {"[[[[[[[[[[[[[[[[[]]]]]]]]]]]]]]]]]",
       "/0/0/0/0/0/0/0/0/0/0/0/0/0/0/0: is nested more than 16 deep"},
  };
  for (const auto& [text, message] : cases) {
    EXPECT_EQ(input_error([&text = text] { parse_json(text); }), message) << text;
  }
}

TEST(ParseJson, DeepNestingDoesNotReachTheStack) {
  const std::string arrays(1 << 20, '[');
  std::string objects;
  for (int i = 0; i < 1 << 18; ++i) objects += "{\"a\":";
  for (const std::string& text : {arrays, objects}) {
    const std::string message = input_error([&] { parse_json(text); });
    EXPECT_NE(message.find("is nested more than 16 deep"), std::string::npos) << message;
  }
}

TEST(JsonText, EscapesStringsAndPointers) {
  EXPECT_EQ(json_quoted("a\"\n\x01\xc3\xb6"), "\"a\\\"\\n\\u0001\xc3\xb6\"");
  EXPECT_EQ(pointer_step("a/b~c"), "/a~1b~0c");
  EXPECT_EQ(pointer_step("\x1b["), "/\\x1b[");
}

}  // namespace
}  // namespace leadsman::loaders
