#include "loaders/json_cursor.h"

#include <algorithm>
#include <limits>

#include "leadsman/error.h"
#include "loaders/text.h"

namespace leadsman::loaders {
namespace {

std::string description(const Json& value) {
  switch (value.type()) {
    case Json::value_t::null:
      return "null";
    case Json::value_t::boolean:
      return value.get<bool>() ? "true" : "false";
    case Json::value_t::string:
      return "the text " + in_quotes(value.get_ref<const std::string&>());
    case Json::value_t::array:
      return "a list of " + std::to_string(value.size());
    case Json::value_t::object:
      return "an object";
    default:
      return "the number " + value.dump();
  }
}

}  // namespace

void JsonCursor::fail(const std::string& message) const {
  throw_input(*file_ + ": " + (pointer_.empty() ? "" : pointer_ + ": ") + message);
}

void JsonCursor::fail_type(const std::string& what) const {
  fail(what + " is wanted, found " + description(*value_));
}

void JsonCursor::fail_unknown(const std::string& message, std::string_view name,
                              const std::vector<std::string>& known) const {
  const std::string hint = nearest_hint(name, known);
  fail(message + (hint.empty() ? "; known: " + join(known) : hint));
}

void JsonCursor::expect_object() const {
  if (!value_->is_object()) fail_type("an object");
}

void JsonCursor::expect_object(const std::vector<std::string>& known) const {
  expect_object();
  for (const auto& [key, value] : value_->items()) {
    if (std::find(known.begin(), known.end(), key) == known.end()) {
      fail_unknown("the key " + in_quotes(key) + " is not known", key, known);
    }
  }
}

bool JsonCursor::has(std::string_view key) const {
  return value_->contains(key);
}

JsonCursor JsonCursor::member(const std::string& key) const {
  const auto found = value_->find(key);
  if (found == value_->end()) fail("the key " + in_quotes(key) + " is missing");
  return JsonCursor(*found, *file_, pointer_ + pointer_step(key));
}

std::vector<std::string> JsonCursor::keys() const {
  std::vector<std::string> names;
  for (const auto& [key, value] : value_->items()) names.push_back(key);
  return names;
}

std::vector<JsonCursor> JsonCursor::items(const std::string& what) const {
  if (!value_->is_array()) fail_type(what);
  std::vector<JsonCursor> list;
  list.reserve(value_->size());
  for (const Json& item : *value_) {
    list.push_back(JsonCursor(item, *file_, pointer_ + "/" + std::to_string(list.size())));
  }
  return list;
}

std::vector<JsonCursor> JsonCursor::items(const std::string& what, std::size_t count) const {
  if (!value_->is_array() || value_->size() != count) fail_type(what);
  return items(what);
}

std::string JsonCursor::text(const std::string& what) const {
  if (!value_->is_string()) fail_type(what);
  const std::string& text = value_->get_ref<const std::string&>();
  if (find_control_character(text)) fail("a control character in " + in_quotes(text));
  return text;
}

std::int64_t JsonCursor::integer(const std::string& what) const {
  if (!value_->is_number_integer()) fail_type(what);
  if (value_->is_number_unsigned() &&
      value_->get<std::uint64_t>() >
          static_cast<std::uint64_t>(std::numeric_limits<std::int64_t>::max())) {
    fail("the number " + value_->dump() + " is too big");
  }
  return value_->get<std::int64_t>();
}

std::int64_t JsonCursor::size(const std::string& what) const {
  const std::int64_t size = integer(what);
  if (size < 1) fail_type(what);
  return size;
}

double JsonCursor::number(const std::string& what) const {
  if (!value_->is_number()) fail_type(what);
  return value_->get<double>();
}

}  // namespace leadsman::loaders
