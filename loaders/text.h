// Text that comes from files: fit to be shown, and valid UTF-8.
#pragma once

#include <cstddef>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

namespace leadsman::loaders {

/// `text` without what could upset a terminal or a log: control characters and bytes that are not
/// UTF-8 become \xNN, and what is longer than `longest` bytes ends in "...".
std::string printable(std::string_view text, std::size_t longest = 120);
/// printable() between single quotes. (Not `quoted`: std::quoted would be found for strings.)
std::string in_quotes(std::string_view text);

/// Offset of the first byte that breaks UTF-8 (RFC 3629: no overlong forms, no surrogates, nothing
/// above U+10FFFF); nullopt when the text is valid.
std::optional<std::size_t> find_invalid_utf8(std::string_view text);
/// Offset of the first control character (U+0000-U+001F, U+007F-U+009F) of valid UTF-8.
std::optional<std::size_t> find_control_character(std::string_view text);

/// "; nearest: 'conv1'", or "" when nothing comes near.
std::string nearest_hint(std::string_view name, const std::vector<std::string>& candidates);

/// "kernel_size, stride, padding"
std::string join(const std::vector<std::string>& words);

}  // namespace leadsman::loaders
