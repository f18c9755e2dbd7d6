// Writes graph.json.
#include <map>
#include <type_traits>
#include <variant>

#include "leadsman/bundle.h"
#include "loaders/json_text.h"
#include "loaders/preprocess_json.h"
#include "ops/operator.h"

namespace leadsman {
namespace {

using loaders::Json;
using loaders::json_quoted;

template <typename List, typename Format>
std::string list_text(const List& list, const Format& format) {
  std::string text = "[";
  for (const auto& item : list) text += (text.size() > 1 ? ", " : "") + format(item);
  return text + "]";
}

std::string integer_text(std::int64_t value) {
  return std::to_string(value);
}

std::string input_text(const GraphInput& input) {
  // Letters by place: [N, C, H, W], [N, T, C], [N, C].
  std::string text = "{\"name\": " + json_quoted(input.name) + ", \"shape\": [";
  for (std::size_t axis = 0; axis < input.shape.size(); ++axis) {
    if (axis > 0) text += ", ";
    if (input.shape[axis] != GraphInput::kFree) {
      text += std::to_string(input.shape[axis]);
    } else if (axis == 0) {
      text += "\"N\"";
    } else if (input.shape.size() == 3) {
      text += "\"T\"";
    } else {
      text += axis == 2 ? "\"H\"" : "\"W\"";
    }
  }
  text += "]";
  if (!input.usual_size.empty()) {
    text += ", \"usual_size\": " + list_text(input.usual_size, integer_text);
  }
  return text + "}";
}

std::string attribute_text(const AttributeValue& value) {
  return std::visit(
      [](const auto& held) -> std::string {
        using T = std::decay_t<decltype(held)>;
        if constexpr (std::is_same_v<T, std::vector<std::int64_t>>) {
          return list_text(held, integer_text);
        } else {
          return Json(held).dump();
        }
      },
      value);
}

// What is left when the attributes that have their default value are left out.
std::map<std::string, AttributeValue> told_attributes(const Layer& layer) {
  std::map<std::string, AttributeValue> told(layer.attributes.values().begin(),
                                             layer.attributes.values().end());
  const ops::Operator* const op = ops::find_operator(layer.operator_name);
  if (op == nullptr) return told;
  Attributes required;
  for (const ops::AttributeSpec& spec : op->contract().attributes) {
    const auto found = told.find(std::string(spec.name));
    if (!spec.fallback && found != told.end()) required.set(found->first, found->second);
  }
  const Attributes defaults = ops::complete_attributes(op->contract(), required);
  for (const auto& [name, value] : defaults.values()) {
    const auto found = told.find(name);
    if (found != told.end() && !required.has(name) && found->second == value) told.erase(found);
  }
  return told;
}

std::string layer_text(const Layer& layer) {
  std::string text = "{\"name\": " + json_quoted(layer.name) +
                     ", \"operator\": " + json_quoted(layer.operator_name) +
                     ", \"inputs\": " + list_text(layer.inputs, json_quoted);
  const auto add_object = [&text](const char* key, const auto& members, const auto& format) {
    if (members.empty()) return;
    std::string object;
    for (const auto& [name, value] : members) {
      object += (object.empty() ? "" : ", ") + json_quoted(name) + ": " + format(value);
    }
    text += std::string(",\n     \"") + key + "\": {" + object + "}";
  };
  add_object("attributes", told_attributes(layer), attribute_text);
  add_object("weights", layer.weights, json_quoted);
  return text + "}";
}

}  // namespace

std::string graph_text(const Graph& graph, const std::optional<Preprocess>& preprocess) {
  std::string text = "{\n  \"leadsman_graph\": 1,\n  \"name\": " + json_quoted(graph.name) +
                     ",\n  \"inputs\": " + list_text(graph.inputs, input_text) +
                     ",\n  \"outputs\": " + list_text(graph.outputs, json_quoted) +
                     ",\n  \"layers\": [";
  const char* before = "\n    ";
  for (const Layer& layer : graph.layers) {
    text += before + layer_text(layer);
    before = ",\n    ";
  }
  text += graph.layers.empty() ? "]" : "\n  ]";
  if (preprocess) text += ",\n  \"preprocess\": " + loaders::preprocess_text(*preprocess);
  return text + "\n}\n";
}

}  // namespace leadsman
