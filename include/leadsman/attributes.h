// What a graph says about one layer beside its inputs and weights: `stride`, `eps`, `heads`, ...
#pragma once

#include <cstdint>
#include <map>
#include <string>
#include <string_view>
#include <variant>
#include <vector>

namespace leadsman {

using AttributeValue =
    std::variant<bool, std::int64_t, double, std::string, std::vector<std::int64_t>>;

/// Named values. Once `complete_attributes` (operator.h) has run, every attribute that the
/// operator declares is present with the declared type, so the getters cannot fail; before that
/// they throw Error(kInput) naming the attribute.
class Attributes {
 public:
  void set(std::string name, AttributeValue value) { values_[std::move(name)] = std::move(value); }
  bool has(std::string_view name) const { return values_.find(name) != values_.end(); }

  bool flag(std::string_view name) const;
  std::int64_t integer(std::string_view name) const;
  double number(std::string_view name) const;
  const std::string& text(std::string_view name) const;
  const std::vector<std::int64_t>& integers(std::string_view name) const;

  const std::map<std::string, AttributeValue, std::less<>>& values() const { return values_; }

 private:
  std::map<std::string, AttributeValue, std::less<>> values_;
};

}  // namespace leadsman
