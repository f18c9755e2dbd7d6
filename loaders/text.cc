#include "loaders/text.h"

#include <cstdint>

#include "leadsman/names.h"

namespace leadsman::loaders {
namespace {

unsigned byte_at(std::string_view text, std::size_t i) {
  return static_cast<unsigned char>(text[i]);
}

// Bytes of the UTF-8 sequence that begins at `i`; 0 when there is no valid one.
std::size_t sequence_length(std::string_view text, std::size_t i) {
  const unsigned lead = byte_at(text, i);
  if (lead < 0x80) return 1;
  std::size_t length = 0;
  unsigned low = 0x80;  // bounds of the second byte: they exclude overlong forms and surrogates
  unsigned high = 0xbf;
  if (lead >= 0xc2 && lead <= 0xdf) {
    length = 2;
  } else if (lead >= 0xe0 && lead <= 0xef) {
    length = 3;
    if (lead == 0xe0) low = 0xa0;
    if (lead == 0xed) high = 0x9f;
  } else if (lead >= 0xf0 && lead <= 0xf4) {
    length = 4;
    if (lead == 0xf0) low = 0x90;
    if (lead == 0xf4) high = 0x8f;
  } else {
    return 0;
  }
  if (i + length > text.size()) return 0;
  if (byte_at(text, i + 1) < low || byte_at(text, i + 1) > high) return 0;
  for (std::size_t k = 2; k < length; ++k) {
    if (byte_at(text, i + k) < 0x80 || byte_at(text, i + k) > 0xbf) return 0;
  }
  return length;
}

bool is_control(std::string_view text, std::size_t i) {
  const unsigned lead = byte_at(text, i);
  return lead < 0x20 || lead == 0x7f ||
         (lead == 0xc2 && i + 1 < text.size() && byte_at(text, i + 1) < 0xa0);
}

}  // namespace

std::string printable(std::string_view text, std::size_t longest) {
  static constexpr char kDigits[] = "0123456789abcdef";
  std::string shown;
  std::size_t i = 0;
  while (i < text.size()) {
    const std::size_t length = sequence_length(text, i);
    if (i + (length == 0 ? 1 : length) > longest) return shown + "...";
    if (length == 0 || is_control(text, i)) {
      const unsigned byte = byte_at(text, i);
      shown += "\\x";
      shown += kDigits[byte >> 4];
      shown += kDigits[byte & 15];
      ++i;
    } else {
      shown.append(text, i, length);
      i += length;
    }
  }
  return shown;
}

std::string in_quotes(std::string_view text) {
  return "'" + printable(text) + "'";
}

std::optional<std::size_t> find_invalid_utf8(std::string_view text) {
  for (std::size_t i = 0; i < text.size();) {
    const std::size_t length = sequence_length(text, i);
    if (length == 0) return i;
    i += length;
  }
  return std::nullopt;
}

std::optional<std::size_t> find_control_character(std::string_view text) {
  for (std::size_t i = 0; i < text.size(); ++i) {
    if (is_control(text, i)) return i;
  }
  return std::nullopt;
}

std::string nearest_hint(std::string_view name, const std::vector<std::string>& candidates) {
  const std::string nearest = nearest_name(name, candidates);
  return nearest.empty() ? "" : "; nearest: " + in_quotes(nearest);
}

std::string join(const std::vector<std::string>& words) {
  std::string text;
  for (const std::string& word : words) text += (text.empty() ? "" : ", ") + word;
  return text;
}

}  // namespace leadsman::loaders
