#include "loaders/npy_header.h"

#include <array>
#include <cstdint>
#include <limits>
#include <string_view>
#include <utility>

#include "leadsman/error.h"
#include "loaders/bytes.h"
#include "loaders/text.h"

namespace leadsman::loaders {
namespace {

constexpr std::string_view kMagic = "\x93NUMPY";
constexpr std::size_t kMaxSizes = 32;  // NumPy's own limit until version 2

// The little of Python's syntax that NumPy writes: one dictionary of a string, a boolean and a
// tuple of integers.
class DictReader {
 public:
  explicit DictReader(std::string_view text) : text_(text) {}

  void expect(char wanted) {
    skip_spaces();
    if (at_ >= text_.size() || text_[at_] != wanted) fail(std::string("'") + wanted + "'");
    ++at_;
  }
  bool accept(char wanted) {
    skip_spaces();
    if (at_ >= text_.size() || text_[at_] != wanted) return false;
    ++at_;
    return true;
  }
  bool accept(std::string_view word) {
    skip_spaces();
    if (text_.substr(at_, word.size()) != word) return false;
    at_ += word.size();
    return true;
  }
  std::string string() {
    skip_spaces();
    const char quote = at_ < text_.size() ? text_[at_] : '\0';
    if (quote != '\'' && quote != '"') fail("a string");
    const std::size_t begin = at_ + 1;
    const std::size_t end = text_.find(quote, begin);
    if (end == std::string_view::npos) fail("the end of a string");
    at_ = end + 1;
    return std::string(text_.substr(begin, end - begin));
  }
  std::int64_t size() {
    skip_spaces();
    const std::size_t begin = at_;
    std::int64_t value = 0;
    for (; at_ < text_.size() && text_[at_] >= '0' && text_[at_] <= '9'; ++at_) {
      const std::int64_t digit = text_[at_] - '0';
      if (value > (std::numeric_limits<std::int64_t>::max() - digit) / 10) {
        throw_input("NPY header: a size in the shape is too big");
      }
      value = value * 10 + digit;
    }
    if (at_ == begin) fail("a size");
    if (at_ < text_.size() && text_[at_] == 'L') ++at_;  // Python 2's long integers
    return value;
  }
  void expect_end() {
    skip_spaces();
    if (at_ != text_.size()) fail("the end");
  }
  [[noreturn]] void fail(const std::string& wanted) const {
    throw_input("NPY header: " + wanted + " is wanted at " + in_quotes(text_.substr(at_, 40)));
  }

 private:
  void skip_spaces() {
    while (at_ < text_.size() && (text_[at_] == ' ' || text_[at_] == '\n' || text_[at_] == '\t')) {
      ++at_;
    }
  }

  std::string_view text_;
  std::size_t at_ = 0;
};

void parse_descr(DictReader& reader, ArrayLayout& layout) {
  if (reader.accept('[')) throw_input("NPY header: structured arrays are not read");
  const std::string descr = reader.string();
  static constexpr std::array<std::pair<std::string_view, ElementType>, 12> kTypes = {{
      {"b1", ElementType::kBool},
      {"u1", ElementType::kU8},
      {"i1", ElementType::kI8},
      {"u2", ElementType::kU16},
      {"i2", ElementType::kI16},
      {"u4", ElementType::kU32},
      {"i4", ElementType::kI32},
      {"u8", ElementType::kU64},
      {"i8", ElementType::kI64},
      {"f2", ElementType::kF16},
      {"f4", ElementType::kF32},
      {"f8", ElementType::kF64},
  }};
  if (descr.size() >= 2) {
    const char order = descr[0];
    const std::string_view kind = std::string_view(descr).substr(1);
    if (kind == "O") throw_input("NPY header: holds pickled Python objects, which are not read");
    for (const auto& [name, type] : kTypes) {
      if (name != kind) continue;
      const bool one_byte = element_bytes(type) == 1;
      if (order != '<' && order != '>' && !(order == '|' && one_byte)) break;
      layout.info.type = type;
      layout.big_endian = order == '>' && !one_byte;
      return;
    }
  }
  throw_input("NPY header: elements of type " + in_quotes(descr) +
              " are not read (b1, u1-u8, i1-i8, f2, f4 and f8 are)");
}

void parse_shape(DictReader& reader, ArrayLayout& layout) {
  reader.expect('(');
  while (!reader.accept(')')) {
    if (layout.info.shape.size() == kMaxSizes) {
      throw_input("NPY header: a shape of more than " + std::to_string(kMaxSizes) + " sizes");
    }
    layout.info.shape.push_back(reader.size());
    if (reader.accept(',')) continue;
    // "(3)" is an integer in Python, not a tuple.
    if (layout.info.shape.size() == 1) reader.fail("','");
    reader.expect(')');
    return;
  }
}

}  // namespace

std::size_t npy_header_bytes(std::span<const std::byte> prefix) {
  if (prefix.size() < kNpyPrefixBytes ||
      std::memcmp(prefix.data(), kMagic.data(), kMagic.size()) != 0) {
    throw_input("does not begin with an NPY header");
  }
  const unsigned major = std::to_integer<unsigned>(prefix[6]);
  const unsigned minor = std::to_integer<unsigned>(prefix[7]);
  if (major < 1 || major > 3 || minor != 0) {
    throw_input("is of NPY version " + std::to_string(major) + "." + std::to_string(minor) +
                "; 1.0, 2.0 and 3.0 are read");
  }
  const std::size_t length = major == 1 ? 10 + std::size_t{load_le<std::uint16_t>(&prefix[8])}
                                        : 12 + std::size_t{load_le<std::uint32_t>(&prefix[8])};
  if (length > kMaxNpyHeaderBytes) {
    throw_input("NPY header: takes " + std::to_string(length) + " bytes, at most " +
                std::to_string(kMaxNpyHeaderBytes) + " are read");
  }
  return length;
}

NpyHeader parse_npy_header(std::span<const std::byte> header) {
  const std::size_t text_at = header[6] == std::byte{1} ? 10 : 12;
  if (header.size() < text_at) throw_input("NPY header: is empty");
  DictReader reader(
      {reinterpret_cast<const char*>(header.data()) + text_at, header.size() - text_at});
  NpyHeader result;
  result.header_bytes = header.size();
  bool descr = false;
  bool order = false;
  bool shape = false;
  const auto once = [](bool& seen, const std::string& key) {
    if (std::exchange(seen, true)) throw_input("NPY header: " + key + " is given twice");
  };
  reader.expect('{');
  while (!reader.accept('}')) {
    const std::string key = reader.string();
    reader.expect(':');
    if (key == "descr") {
      once(descr, key);
      parse_descr(reader, result.layout);
    } else if (key == "fortran_order") {
      once(order, key);
      result.layout.fortran_order = reader.accept("True");
      if (!result.layout.fortran_order && !reader.accept("False")) reader.fail("True or False");
    } else if (key == "shape") {
      once(shape, key);
      parse_shape(reader, result.layout);
    } else {
      throw_input("NPY header: the key " + in_quotes(key) + " is not known");
    }
    if (!reader.accept(',')) {
      reader.expect('}');
      break;
    }
  }
  reader.expect_end();
  if (!descr || !order || !shape) {
    throw_input(std::string("NPY header: ") +
                (!descr   ? "descr"
                 : !order ? "fortran_order"
                          : "shape") +
                " is missing");
  }
  const std::optional<std::int64_t> bytes = array_bytes(result.layout.info);
  if (!bytes) {
    throw_input("NPY header: a shape of " + shape_text(result.layout.info.shape) +
                " is more than any file can hold");
  }
  result.data_bytes = *bytes;
  return result;
}

std::string format_npy_header(const Shape& shape) {
  std::string dict = "{'descr': '<f4', 'fortran_order': False, 'shape': (";
  for (int axis = 0; axis < shape.rank(); ++axis) {
    if (axis > 0) dict += ", ";
    dict += std::to_string(shape[axis]);
  }
  dict += shape.rank() == 1 ? ",), }" : "), }";
  constexpr std::size_t kAlignment = 64;
  const std::size_t unpadded = kMagic.size() + 4 + dict.size() + 1;
  dict.append((kAlignment - unpadded % kAlignment) % kAlignment, ' ');
  dict += '\n';
  std::string header(kMagic);
  header += '\x01';
  header += '\x00';
  append_le(header, static_cast<std::uint16_t>(dict.size()));
  return header + dict;
}

}  // namespace leadsman::loaders
