#include "tests/support/operator_cases.h"

#include <filesystem>

#include <nlohmann/json.hpp>

#include "leadsman/error.h"
#include "leadsman/tensor_file.h"

namespace leadsman::testing {
namespace {

using Json = nlohmann::json;

AttributeValue attribute_value(const Json& json) {
  if (json.is_boolean()) return json.get<bool>();
  if (json.is_number_integer()) return json.get<std::int64_t>();
  if (json.is_number()) return json.get<double>();
  if (json.is_string()) return json.get<std::string>();
  return json.get<std::vector<std::int64_t>>();
}

StoredCase read_case(const TensorFile& file, std::string_view op, const std::string& name,
                     const Json& about) {
  StoredCase stored{.name = name, .call = {.op = std::string(op)}, .expected = {}};
  for (const auto& [key, value] : about.at("attributes").items()) {
    stored.call.attributes.set(key, attribute_value(value));
  }
  if (about.contains("activation")) {
    stored.call.activation = {ops::activation_kind(about["activation"].get<std::string>()),
                              about.value("slope", 0.01F)};
  }
  for (int i = 1; file.has(name + "/input" + std::to_string(i)); ++i) {
    stored.call.inputs.push_back(file.read(name + "/input" + std::to_string(i)));
  }
  const std::string prefix = name + "/weight.";
  for (const std::string& tensor : file.names()) {
    if (tensor.starts_with(prefix)) {
      stored.call.weights[tensor.substr(prefix.size())] = file.read(tensor);
    }
  }
  if (file.has(name + "/residual")) stored.call.residual = file.read(name + "/residual");
  stored.expected = file.read(name + "/output");
  return stored;
}

}  // namespace

std::vector<StoredCase> stored_cases(std::string_view op) {
  const std::string name(op);
  std::vector<StoredCase> cases;
  for (const auto& entry : std::filesystem::directory_iterator(std::string(LEADSMAN_SOURCE_DIR) +
                                                               "/tests/data/operators")) {
    const std::string stem = entry.path().stem().string();
    if (stem != name && !stem.starts_with(name + "+")) continue;
    const TensorFile file = TensorFile::open(entry.path().string());
    for (const auto& [label, text] : file.metadata()) {
      if (label == "library") continue;
      cases.push_back(read_case(file, op, label, Json::parse(text)));
    }
  }
  if (cases.empty()) throw_input("no cases for " + name);
  return cases;
}

}  // namespace leadsman::testing
