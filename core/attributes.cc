#include "leadsman/attributes.h"

#include "leadsman/error.h"

namespace leadsman {
namespace {

template <typename T>
const T& get(const std::map<std::string, AttributeValue, std::less<>>& values,
             std::string_view name, const char* kind) {
  const auto found = values.find(name);
  if (found == values.end()) throw_input(std::string(name) + ": missing");
  const T* value = std::get_if<T>(&found->second);
  if (value == nullptr) throw_input(std::string(name) + ": is not " + kind);
  return *value;
}

}  // namespace

bool Attributes::flag(std::string_view name) const {
  return get<bool>(values_, name, "true or false");
}
std::int64_t Attributes::integer(std::string_view name) const {
  return get<std::int64_t>(values_, name, "an integer");
}
double Attributes::number(std::string_view name) const {
  return get<double>(values_, name, "a number");
}
const std::string& Attributes::text(std::string_view name) const {
  return get<std::string>(values_, name, "a text");
}
const std::vector<std::int64_t>& Attributes::integers(std::string_view name) const {
  return get<std::vector<std::int64_t>>(values_, name, "a list of integers");
}

}  // namespace leadsman
