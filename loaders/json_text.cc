#include "loaders/json_text.h"

#include <algorithm>
#include <cstdint>
#include <utility>
#include <vector>

#include "leadsman/error.h"
#include "loaders/text.h"

namespace leadsman::loaders {
namespace {

// Builds the tree event by event. The parser itself does not recurse, so neither depth nor length
// of the text can exhaust the stack; returning false stops it.
class TreeBuilder {
 public:
  explicit TreeBuilder(std::string_view text) : text_(text) {}

  bool null() { return put(nullptr); }
  bool boolean(bool value) { return put(value); }
  bool number_integer(std::int64_t value) { return put(value); }
  bool number_unsigned(std::uint64_t value) { return put(value); }
  bool number_float(double value, const std::string& /*text*/) { return put(value); }
  bool string(std::string& value) { return put(std::move(value)); }
  bool binary(Json::binary_t& /*value*/) { return false; }  // never in JSON text
  bool start_object(std::size_t /*size*/) { return enter(Json::object()); }
  bool start_array(std::size_t /*size*/) { return enter(Json::array()); }
  bool end_object() { return leave(); }
  bool end_array() { return leave(); }
  bool key(std::string& name) {
    Json& object = *open_.back();
    if (object.contains(name)) {
      error_ = pointer() + ": the key " + in_quotes(name) + " is given twice";
      return false;
    }
    key_ = std::move(name);
    return true;
  }
  bool parse_error(std::size_t position, const std::string& /*token*/,
                   const nlohmann::detail::exception& reason) {
    error_ = json_syntax_error(text_, position, reason.what());
    return false;
  }

  Json take() { return std::move(root_); }
  const std::string& error() const { return error_; }

 private:
  bool put(Json value) {
    slot(std::move(value));
    return true;
  }

  bool enter(Json container) {
    if (open_.size() >= static_cast<std::size_t>(kMaxJsonDepth)) {
      error_ = pointer() + ": is nested more than " + std::to_string(kMaxJsonDepth) + " deep";
      return false;
    }
    steps_.push_back(open_.empty() ? "" : step());
    open_.push_back(slot(std::move(container)));
    return true;
  }

  bool leave() {
    open_.pop_back();
    steps_.pop_back();
    return true;
  }

  Json* slot(Json value) {
    if (open_.empty()) {
      root_ = std::move(value);
      return &root_;
    }
    Json& parent = *open_.back();
    if (parent.is_array()) {
      parent.push_back(std::move(value));
      return &parent.back();
    }
    return &(parent[key_] = std::move(value));
  }

  // The pointer step of the value that comes next.
  std::string step() const {
    const Json& parent = *open_.back();
    return parent.is_array() ? "/" + std::to_string(parent.size()) : pointer_step(key_);
  }

  std::string pointer() const {
    std::string path;
    for (const std::string& one : steps_) path += one;
    return path.empty() ? "/" : path;
  }

  std::string_view text_;
  Json root_;
  // Containers being filled. Growing a vector moves its elements, but never those of an open
  // container: nothing is added to the parent while a child is open.
  std::vector<Json*> open_;
  std::vector<std::string> steps_;
  std::string key_;
  std::string error_;
};

}  // namespace

Json parse_json(std::string_view text) {
  require_no_zero_byte(text);
  TreeBuilder builder(text);
  if (!Json::sax_parse(text.begin(), text.end(), &builder)) throw_input(builder.error());
  return builder.take();
}

void require_no_zero_byte(std::string_view text) {
  const std::size_t at = text.find('\0');
  if (at != std::string_view::npos) throw_input(json_syntax_error(text, at + 1, "a zero byte"));
}

std::string json_syntax_error(std::string_view text, std::size_t position,
                              std::string_view parser_message) {
  const std::size_t end = std::min(position == 0 ? 0 : position - 1, text.size());
  const std::string_view before = text.substr(0, end);
  const auto line = std::count(before.begin(), before.end(), '\n') + 1;
  const std::size_t newline = before.rfind('\n');
  const std::string_view row = before.substr(newline == std::string_view::npos ? 0 : newline + 1);
  const auto column = std::count_if(row.begin(), row.end(), [](char c) {
    return (static_cast<unsigned char>(c) & 0xc0) != 0x80;  // characters, not bytes
  });
  // The parser's own words begin after its error class and position.
  std::string_view reason = parser_message;
  for (const std::string_view mark : {"] ", "syntax error "}) {
    const std::size_t found = reason.find(mark);
    if (found != std::string_view::npos) reason = reason.substr(found + mark.size());
  }
  return "line " + std::to_string(line) + ", column " + std::to_string(column + 1) +
         ": not valid JSON: " + printable(reason, 240);
}

std::string json_quoted(std::string_view text) {
  return Json(std::string(text)).dump();
}

std::string pointer_step(std::string_view key) {
  std::string step = "/";
  for (const char c : printable(key)) {
    if (c == '~') {
      step += "~0";
    } else if (c == '/') {
      step += "~1";
    } else {
      step += c;
    }
  }
  return step;
}

}  // namespace leadsman::loaders
