// Strict reading of JSON that comes from outside.
#pragma once

#include <cstddef>
#include <string>
#include <string_view>

#include <nlohmann/json.hpp>

namespace leadsman::loaders {

using Json = nlohmann::json;

/// Deeper nesting than this is an error: no file here needs more than five levels.
inline constexpr int kMaxJsonDepth = 16;

/// The whole text as one JSON value (RFC 8259). Throws Error(kInput) without a file name: syntax
/// errors begin with "line 3, column 8: ", a repeated key with the JSON pointer of its object;
/// NaN, infinities, numbers beyond a double, comments and trailing commas are syntax errors. Time
/// and memory are linear in the text.
Json parse_json(std::string_view text);

/// Throws Error(kInput), worded as a syntax error, when a zero byte stands in the text: the parser
/// would take it for the end and not look at the rest.
void require_no_zero_byte(std::string_view text);

/// How a SAX handler words a syntax error: where it is, and the parser's reason cut down to a line.
std::string json_syntax_error(std::string_view text, std::size_t position,
                              std::string_view parser_message);

/// `text` as a JSON string with its quotes. Requires valid UTF-8.
std::string json_quoted(std::string_view text);

/// One step of a JSON pointer (RFC 6901): "/" and `key` with `~` and `/` escaped, fit to be shown.
std::string pointer_step(std::string_view key);

}  // namespace leadsman::loaders
