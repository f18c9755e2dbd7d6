// A value in a JSON document that knows its place, for messages.
#pragma once

#include <cstddef>
#include <cstdint>
#include <string>
#include <string_view>
#include <vector>

#include "loaders/json_text.h"

namespace leadsman::loaders {

/// Every getter checks the type and throws Error(kInput) "file: /pointer: ..., found ..." when it
/// is another. Refers to the document and to `file`, which must outlive it.
class JsonCursor {
 public:
  JsonCursor(const Json& value, const std::string& file) : value_(&value), file_(&file) {}

  /// Requires an object whose keys are all among `known`; an unknown key comes with the nearest
  /// known one.
  void expect_object(const std::vector<std::string>& known) const;
  /// Requires an object; any keys.
  void expect_object() const;
  /// Of an object: true when the key is there.
  bool has(std::string_view key) const;
  /// Of an object: the member; an error when it is missing.
  JsonCursor member(const std::string& key) const;
  /// Of an object with any keys.
  std::vector<std::string> keys() const;

  /// Items of a list; `what` says what is wanted: "a list of names".
  std::vector<JsonCursor> items(const std::string& what) const;
  /// Items of a list of exactly `count`.
  std::vector<JsonCursor> items(const std::string& what, std::size_t count) const;

  /// Text without control characters.
  std::string text(const std::string& what) const;
  std::int64_t integer(const std::string& what) const;
  /// An integer of at least 1.
  std::int64_t size(const std::string& what) const;
  /// An integer or not.
  double number(const std::string& what) const;

  const Json& value() const { return *value_; }
  [[noreturn]] void fail(const std::string& message) const;
  /// "what is wanted, found the number 3"
  [[noreturn]] void fail_type(const std::string& what) const;
  /// "no ... is called 'x'; nearest: 'y'" or, when nothing is near, "...; known: a, b".
  [[noreturn]] void fail_unknown(const std::string& message, std::string_view name,
                                 const std::vector<std::string>& known) const;

 private:
  JsonCursor(const Json& value, const std::string& file, std::string pointer)
      : value_(&value), file_(&file), pointer_(std::move(pointer)) {}

  const Json* value_;
  const std::string* file_;
  std::string pointer_;  ///< RFC 6901; "" is the document
};

}  // namespace leadsman::loaders
