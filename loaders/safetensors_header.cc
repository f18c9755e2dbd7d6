#include "loaders/safetensors_header.h"

#include <algorithm>
#include <array>
#include <limits>
#include <set>
#include <utility>

#include "leadsman/error.h"
#include "loaders/element_type.h"
#include "loaders/json_text.h"
#include "loaders/text.h"

namespace leadsman::loaders {
namespace {

constexpr std::size_t kMostAxes = 32;  // of one shape; more is taken for an attack on memory
constexpr std::string_view kMetadataKey = "__metadata__";

constexpr std::array kElementTypes = {
    ElementType::kBool, ElementType::kU8,  ElementType::kI8,  ElementType::kU16, ElementType::kI16,
    ElementType::kU32,  ElementType::kI32, ElementType::kU64, ElementType::kI64, ElementType::kF16,
    ElementType::kBF16, ElementType::kF32, ElementType::kF64};

// Reads the header as a stream: nothing is stored but the entries themselves. The levels are
//   0 the text, 1 {name: ...}, 2 {"dtype": ...} or the metadata, 3 the numbers of an array.
class HeaderReader {
 public:
  explicit HeaderReader(std::string_view text) : text_(text) {}

  bool null() { return unexpected("null"); }
  bool boolean(bool value) { return unexpected(value ? "true" : "false"); }
  bool number_integer(std::int64_t value) {
    if (level_ != 3) return unexpected("the number " + std::to_string(value));
    return fail("the negative number " + std::to_string(value) + " in " + field_);
  }
  bool number_float(double /*value*/, const std::string& text) {
    if (level_ != 3) return unexpected("the number " + printable(text, 40));
    return fail("a number that is not an integer in " + field_ + ": " + printable(text, 40));
  }
  bool number_unsigned(std::uint64_t value) {
    if (level_ != 3) return unexpected("the number " + std::to_string(value));
    if (value > static_cast<std::uint64_t>(std::numeric_limits<std::int64_t>::max())) {
      return fail("the number " + std::to_string(value) + " in " + field_ + " is too big");
    }
    std::vector<std::int64_t>& list = field_ == "shape" ? entry_.info.shape : offsets_;
    const std::size_t most = field_ == "shape" ? kMostAxes : 2;
    if (list.size() == most) {
      return fail(field_ + " has more than " + std::to_string(most) + " numbers");
    }
    list.push_back(static_cast<std::int64_t>(value));
    return true;
  }
  bool string(std::string& value) {
    if (level_ == 2 && in_metadata_) {
      header_.metadata.emplace(metadata_key_, std::move(value));
      return true;
    }
    if (level_ != 2 || field_ != "dtype") return unexpected("a string");
    for (const ElementType type : kElementTypes) {
      if (element_type_name(type) == value) {
        entry_.info.type = type;
        return true;
      }
    }
    return fail("dtype " + in_quotes(value) + " is not known");
  }
  bool binary(Json::binary_t& /*value*/) { return false; }  // never in JSON text

  bool start_object(std::size_t /*size*/) {
    if (level_ >= 2) return unexpected("an object");
    if (level_ == 1 && !in_metadata_) {
      entry_ = SafetensorsEntry{name_, {}, 0, 0};
      offsets_.clear();
      fields_.clear();
    }
    ++level_;
    return true;
  }
  bool end_object() {
    --level_;
    if (level_ != 1) return true;
    if (in_metadata_) {
      in_metadata_ = false;
      return true;
    }
    for (const char* field : {"dtype", "shape", "data_offsets"}) {
      if (fields_.count(field) == 0) return fail(std::string(field) + " is missing");
    }
    if (offsets_.size() != 2) return fail("data_offsets has not two numbers");
    entry_.begin = offsets_[0];
    entry_.end = offsets_[1];
    header_.entries.push_back(std::move(entry_));
    return true;
  }
  bool start_array(std::size_t /*size*/) {
    if (level_ != 2 || in_metadata_ || field_ == "dtype") return unexpected("an array");
    ++level_;
    return true;
  }
  bool end_array() {
    --level_;
    return true;
  }
  bool key(std::string& name) {
    if (level_ == 1) {
      name_ = std::move(name);
      in_metadata_ = name_ == kMetadataKey;
      if (!names_.insert(name_).second) return fail_plain(in_quotes(name_) + " is given twice");
      if (name_.empty()) return fail_plain("a tensor without a name");
      return true;
    }
    if (in_metadata_) {
      if (header_.metadata.find(name) != header_.metadata.end()) {
        return fail_plain("__metadata__: the key " + in_quotes(name) + " is given twice");
      }
      metadata_key_ = std::move(name);
      return true;
    }
    field_ = std::move(name);
    if (field_ != "dtype" && field_ != "shape" && field_ != "data_offsets") {
      return fail("the key " + in_quotes(field_) + " is not known");
    }
    if (!fields_.insert(field_).second) return fail(field_ + " is given twice");
    return true;
  }
  bool parse_error(std::size_t position, const std::string& /*token*/,
                   const nlohmann::detail::exception& reason) {
    return fail_plain(json_syntax_error(text_, position, reason.what()));
  }

  SafetensorsHeader take() { return std::move(header_); }
  const std::string& error() const { return error_; }

 private:
  bool fail_plain(std::string message) {
    error_ = std::move(message);
    return false;
  }
  bool fail(const std::string& message) {
    return fail_plain("tensor " + in_quotes(name_) + ": " + message);
  }
  bool unexpected(const std::string& found) {
    if (level_ == 0) return fail_plain("the header is " + found + ", not an object");
    if (in_metadata_) return fail_plain("__metadata__: " + found + " where strings are wanted");
    if (level_ == 1) return fail(found + " where an object is wanted");
    if (level_ == 3) return fail(found + " among the numbers of " + field_);
    return fail(found + " as " + field_);
  }

  std::string_view text_;
  SafetensorsHeader header_;
  int level_ = 0;
  bool in_metadata_ = false;
  std::string name_;
  std::string field_;
  std::string metadata_key_;
  std::set<std::string> names_;
  std::set<std::string> fields_;
  SafetensorsEntry entry_;
  std::vector<std::int64_t> offsets_;
  std::string error_;
};

void check_entry(const SafetensorsEntry& entry, std::int64_t data_bytes) {
  const std::string place = "tensor " + in_quotes(entry.name) + ": ";
  if (entry.begin > entry.end) {
    throw_input(place + "data_offsets begin at " + std::to_string(entry.begin) +
                ", after their end at " + std::to_string(entry.end));
  }
  if (entry.end > data_bytes) {
    throw_input(place + "data_offsets end at " + std::to_string(entry.end) + ", the file holds " +
                std::to_string(data_bytes));
  }
  const std::string type(element_type_name(entry.info.type));
  const std::optional<std::int64_t> bytes = array_bytes(entry.info);
  if (!bytes) {
    throw_input(place + "shape " + shape_text(entry.info.shape) + " of " + type +
                " is more than any file can hold");
  }
  if (*bytes != entry.end - entry.begin) {
    throw_input(place + "shape " + shape_text(entry.info.shape) + " of " + type + " takes " +
                std::to_string(*bytes) + " bytes, data_offsets span " +
                std::to_string(entry.end - entry.begin));
  }
}

}  // namespace

SafetensorsHeader parse_safetensors_header(std::string_view text, std::int64_t data_bytes) {
  require_no_zero_byte(text);
  HeaderReader reader(text);
  if (!Json::sax_parse(text.begin(), text.end(), &reader)) throw_input(reader.error());
  SafetensorsHeader header = reader.take();
  for (const SafetensorsEntry& entry : header.entries) check_entry(entry, data_bytes);
  std::stable_sort(header.entries.begin(), header.entries.end(),
                   [](const SafetensorsEntry& a, const SafetensorsEntry& b) {
                     return std::pair(a.begin, a.end) < std::pair(b.begin, b.end);
                   });
  std::int64_t covered = 0;
  const std::string* before = nullptr;
  for (const SafetensorsEntry& entry : header.entries) {
    const std::string place = "tensor " + in_quotes(entry.name) + ": data_offsets begin at " +
                              std::to_string(entry.begin) + ", ";
    if (entry.begin < covered) throw_input(place + "inside tensor " + in_quotes(*before));
    if (entry.begin > covered) {
      throw_input(place + "which leaves " + std::to_string(entry.begin - covered) +
                  " bytes before it to no tensor");
    }
    covered = entry.end;
    before = &entry.name;
  }
  if (covered != data_bytes) {
    throw_input("the last " + std::to_string(data_bytes - covered) +
                " bytes of the data belong to no tensor");
  }
  return header;
}

}  // namespace leadsman::loaders
