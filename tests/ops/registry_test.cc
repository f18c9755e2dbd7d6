// What holds for every operator, and that loaders/GRAPH_FORMAT.md tells the truth about them.
#include <algorithm>
#include <fstream>
#include <map>
#include <set>
#include <sstream>

#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "ops/operator.h"
#include "tests/support/operator_cases.h"

namespace leadsman::ops {
namespace {

class EveryOperator : public ::testing::TestWithParam<const Operator*> {};

bool is_word(std::string_view text) {
  return !text.empty() && std::ranges::all_of(text, [](char c) {
    return (c >= 'a' && c <= 'z') || (c >= '0' && c <= '9') || c == '_';
  });
}

TEST_P(EveryOperator, IsFoundByItsName) {
  EXPECT_TRUE(is_word(GetParam()->contract().name));
  EXPECT_EQ(find_operator(GetParam()->contract().name), GetParam());
}

TEST_P(EveryOperator, SaysWhatItAndItsPartsMean) {
  const Contract& contract = GetParam()->contract();
  EXPECT_FALSE(contract.meaning.empty());
  EXPECT_GE(contract.min_inputs, 1);
  EXPECT_GE(contract.max_inputs, contract.min_inputs);
  std::set<std::string_view> names;
  for (const AttributeSpec& spec : contract.attributes) {
    EXPECT_TRUE(is_word(spec.name)) << spec.name;
    EXPECT_TRUE(names.insert(spec.name).second) << spec.name << " twice";
    EXPECT_FALSE(spec.meaning.empty()) << spec.name;
    EXPECT_LT(spec.minimum, spec.maximum) << spec.name;
  }
  std::set<std::string_view> roles;
  for (const WeightSpec& spec : contract.weights) {
    EXPECT_TRUE(is_word(spec.role)) << spec.role;
    EXPECT_TRUE(roles.insert(spec.role).second) << spec.role << " twice";
    EXPECT_FALSE(spec.meaning.empty()) << spec.role;
  }
}

// A value of the attribute's type that its contract allows.
AttributeValue allowed_value(const AttributeSpec& spec) {
  const double low = std::max(spec.minimum, 1.0);
  switch (spec.type) {
    case AttributeType::kFlag:
      return true;
    case AttributeType::kNumber:
      return low;
    case AttributeType::kText:
      return std::string(spec.choices.empty() ? "word" : spec.choices.front());
    default:
      return static_cast<std::int64_t>(low);
  }
}

TEST_P(EveryOperator, AcceptsItsOwnFallbacks) {
  const Contract& contract = GetParam()->contract();
  Attributes required;
  for (const AttributeSpec& spec : contract.attributes) {
    if (!spec.fallback) required.set(std::string(spec.name), allowed_value(spec));
  }
  const Attributes complete = complete_attributes(contract, required);
  EXPECT_EQ(complete.values().size(), contract.attributes.size());
  // What came out is complete already: checking it again changes nothing.
  EXPECT_EQ(complete_attributes(contract, complete).values(), complete.values());
}

TEST_P(EveryOperator, RefusesWhatItDoesNotKnow) {
  const Contract& contract = GetParam()->contract();
  Attributes given;
  given.set("no_such_attribute", std::int64_t{1});
  try {
    complete_attributes(contract, given);
    FAIL() << "accepted";
  } catch (const Error& error) {
    EXPECT_EQ(error.kind(), ErrorKind::kInput);
    EXPECT_EQ(std::string(error.what()).find("no_such_attribute: " + std::string(contract.name)),
              0U)
        << error.what();
  }
}

TEST_P(EveryOperator, MissesWhatItNeeds) {
  const Contract& contract = GetParam()->contract();
  for (const AttributeSpec& missing : contract.attributes) {
    if (missing.fallback) continue;
    Attributes given;
    for (const AttributeSpec& spec : contract.attributes) {
      if (!spec.fallback && spec.name != missing.name) {
        given.set(std::string(spec.name), allowed_value(spec));
      }
    }
    try {
      complete_attributes(contract, given);
      FAIL() << "accepted without " << missing.name;
    } catch (const Error& error) {
      EXPECT_EQ(std::string(error.what()).find(std::string(missing.name) + ": missing"), 0U)
          << error.what();
    }
  }
}

TEST_P(EveryOperator, EndsInAReferenceThatNeverRefuses) {
  const auto strategies = GetParam()->strategies();
  ASSERT_FALSE(strategies.empty());
  std::set<std::string_view> names;
  for (const Strategy* strategy : strategies) {
    EXPECT_TRUE(is_word(strategy->name())) << strategy->name();
    EXPECT_TRUE(names.insert(strategy->name()).second) << strategy->name() << " twice";
  }
  EXPECT_EQ(strategies.back()->name(), "reference");
  for (const auto& stored : testing::stored_cases(GetParam()->contract().name)) {
    EXPECT_EQ(strategies.back()->refusal(testing::op_context(stored.call)), "") << stored.name;
  }
}

// The bytes of a view are the output: in memory order they agree.
TEST_P(EveryOperator, IsAViewOnlyWhereTheBytesAgree) {
  for (const auto& stored : testing::stored_cases(GetParam()->contract().name)) {
    const OpContext context = testing::op_context(stored.call);
    if (!GetParam()->is_view(context)) continue;
    SCOPED_TRACE(stored.name);
    const Tensor& input = stored.call.inputs[0];
    ASSERT_EQ(input.elements(), context.output.elements());
    Tensor memory(input.shape());
    copy_from_logical(input.data(), {memory.mutable_data(), input.shape()});
    const Tensor output = to_tensor({memory.data(), context.output});
    for (std::int64_t i = 0; i < output.elements(); ++i) {
      ASSERT_EQ(output.data()[i], stored.expected.data()[i]) << i;
    }
  }
}

INSTANTIATE_TEST_SUITE_P(AllOperators, EveryOperator, ::testing::ValuesIn(all_operators()),
                         [](const auto& test) { return std::string(test.param->contract().name); });

TEST(Registry, IsInAlphabeticalOrder) {
  EXPECT_TRUE(std::ranges::is_sorted(all_operators(), {},
                                     [](const Operator* each) { return each->contract().name; }));
  EXPECT_EQ(find_operator("no_such_operator"), nullptr);
  EXPECT_EQ(find_operator(""), nullptr);
}

// The cells of each row of the table "Operators", by the first of them.
std::map<std::string, std::vector<std::string>> documented_operators() {
  std::ifstream file(std::string(LEADSMAN_SOURCE_DIR) + "/loaders/GRAPH_FORMAT.md");
  std::map<std::string, std::vector<std::string>> rows;
  bool in_section = false;
  for (std::string line; std::getline(file, line);) {
    if (line.starts_with("## ")) in_section = line == "## Operators";
    if (!in_section || !line.starts_with("|")) continue;
    std::vector<std::string> cells;
    std::istringstream text(line.substr(1));
    for (std::string cell; std::getline(text, cell, '|');) {
      const auto first = cell.find_first_not_of(' ');
      cells.push_back(first == std::string::npos
                          ? ""
                          : cell.substr(first, cell.find_last_not_of(' ') - first + 1));
    }
    if (cells[0] != "operator" && !cells[0].starts_with("---")) rows[cells[0]] = cells;
  }
  return rows;
}

std::set<std::string> words_of(const std::string& text) {
  std::set<std::string> words;
  std::string word;
  for (const char c : text + ' ') {
    if (is_word({&c, 1})) {
      word += c;
    } else if (!word.empty()) {
      words.insert(std::move(word));
      word.clear();
    }
  }
  return words;
}

TEST(GraphFormat, DocumentsEveryOperatorAndNoOther) {
  std::vector<std::string> documented;
  for (const auto& [name, cells] : documented_operators()) documented.push_back(name);
  std::vector<std::string> registered;
  for (const Operator* each : all_operators()) registered.emplace_back(each->contract().name);
  std::ranges::sort(registered);
  EXPECT_EQ(documented, registered);
}

TEST(GraphFormat, DocumentsAttributesWordsAndWeights) {
  auto documented = documented_operators();
  for (const Operator* each : all_operators()) {
    const Contract& contract = each->contract();
    SCOPED_TRACE(contract.name);
    const std::vector<std::string>& cells = documented[std::string(contract.name)];
    ASSERT_EQ(cells.size(), 5U);
    const std::set<std::string> attributes = words_of(cells[2]);
    for (const AttributeSpec& spec : contract.attributes) {
      EXPECT_TRUE(attributes.contains(std::string(spec.name))) << spec.name;
      for (const std::string_view choice : spec.choices) {
        EXPECT_TRUE(attributes.contains(std::string(choice))) << choice;
      }
    }
    EXPECT_EQ(cells[2].empty(), contract.attributes.empty());
    for (const WeightSpec& spec : contract.weights) {
      EXPECT_TRUE(words_of(cells[3]).contains(std::string(spec.role))) << spec.role;
      const bool optional = cells[3].find(std::string(spec.role) + "?") != std::string::npos;
      EXPECT_EQ(optional, !spec.required) << spec.role;
    }
    EXPECT_EQ(cells[3].empty(), contract.weights.empty());
  }
}

}  // namespace
}  // namespace leadsman::ops
