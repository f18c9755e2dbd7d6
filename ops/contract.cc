// Attributes checked against an operator's contract.
#include <algorithm>
#include <cmath>

#include "leadsman/error.h"
#include "leadsman/names.h"
#include "ops/operator.h"

namespace leadsman::ops {
namespace {

using Integers = std::vector<std::int64_t>;

std::string number_text(double value) {
  const bool whole = std::floor(value) == value && std::abs(value) < 1e15;
  return whole ? std::to_string(static_cast<std::int64_t>(value)) : std::to_string(value);
}

void check_range(const AttributeSpec& spec, double value) {
  // Written so that NaN fails too.
  if (!(value >= spec.minimum && value <= spec.maximum)) {
    const bool low = !(value >= spec.minimum);
    throw_input(
        std::string(spec.name) + ": " + number_text(value) + " is " +
        (low ? "below " + number_text(spec.minimum) : "above " + number_text(spec.maximum)));
  }
}

// One integer, a pair or (for paddings) four, spread to the full count. A list of one is neither.
Integers spread(const AttributeSpec& spec, const AttributeValue& value, std::size_t count) {
  if (const auto* one = std::get_if<std::int64_t>(&value)) return Integers(count, *one);
  Integers given;
  if (const auto* list = std::get_if<Integers>(&value)) given = *list;
  if (given.size() == 2 && count == 4) return {given[0], given[1], given[0], given[1]};
  if (given.size() == count) return given;
  throw_input(std::string(spec.name) + ": is not " +
              (count == 2 ? "an integer or [height, width]"
                          : "an integer, [height, width] or [top, left, bottom, right]"));
}

AttributeValue complete_value(const AttributeSpec& spec, const AttributeValue& value) {
  const auto wrong = [&](const char* kind) {
    throw_input(std::string(spec.name) + ": is not " + kind);
  };
  switch (spec.type) {
    case AttributeType::kFlag:
      if (!std::holds_alternative<bool>(value)) wrong("true or false");
      return value;
    case AttributeType::kInteger:
      if (!std::holds_alternative<std::int64_t>(value)) wrong("an integer");
      check_range(spec, static_cast<double>(std::get<std::int64_t>(value)));
      return value;
    case AttributeType::kNumber: {
      double number = 0.0;
      if (const auto* integer = std::get_if<std::int64_t>(&value)) {
        number = static_cast<double>(*integer);
      } else if (const auto* real = std::get_if<double>(&value)) {
        number = *real;
      } else {
        wrong("a number");
      }
      check_range(spec, number);
      return number;
    }
    case AttributeType::kText: {
      const auto* text = std::get_if<std::string>(&value);
      if (text == nullptr) wrong("a text");
      if (spec.choices.empty() || std::ranges::find(spec.choices, *text) != spec.choices.end()) {
        return value;
      }
      std::string message = std::string(spec.name) + ": '" + *text + "' is none of";
      for (std::size_t i = 0; i < spec.choices.size(); ++i) {
        message += (i == 0 ? " " : ", ") + std::string(spec.choices[i]);
      }
      throw_input(message);
    }
    case AttributeType::kPair:
    case AttributeType::kPadding: {
      const Integers full = spread(spec, value, spec.type == AttributeType::kPair ? 2 : 4);
      for (const std::int64_t each : full) check_range(spec, static_cast<double>(each));
      return full;
    }
  }
  return value;
}

}  // namespace

Attributes complete_attributes(const Contract& contract, const Attributes& given) {
  std::vector<std::string> known;
  for (const AttributeSpec& spec : contract.attributes) known.emplace_back(spec.name);
  for (const auto& [name, value] : given.values()) {
    if (std::ranges::find(known, name) != known.end()) continue;
    const std::string nearest = nearest_name(name, known);
    throw_input(name + ": " + std::string(contract.name) + " has no such attribute" +
                (nearest.empty() ? "" : "; nearest: '" + nearest + "'"));
  }
  Attributes complete;
  for (const AttributeSpec& spec : contract.attributes) {
    const auto found = given.values().find(spec.name);
    if (found != given.values().end()) {
      complete.set(std::string(spec.name), complete_value(spec, found->second));
    } else if (spec.fallback) {
      complete.set(std::string(spec.name), complete_value(spec, *spec.fallback));
    } else {
      throw_input(std::string(spec.name) + ": missing; " + std::string(contract.name) +
                  " needs it (" + std::string(spec.meaning) + ")");
    }
  }
  return complete;
}

void require_shape(std::string_view what, const Shape& actual, const Shape& expected) {
  if (actual == expected) return;
  throw_input(std::string(what) + " has shape " + actual.to_string() + ", expected " +
              expected.to_string());
}

void require_rank(std::string_view what, const Shape& actual, std::initializer_list<int> ranks) {
  std::string allowed;
  for (const int rank : ranks) {
    if (actual.rank() == rank) return;
    allowed += (allowed.empty() ? "" : " or ") + std::to_string(rank);
  }
  throw_input(std::string(what) + " has shape " + actual.to_string() + ", expected rank " +
              allowed);
}

}  // namespace leadsman::ops
