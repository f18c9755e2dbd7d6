// Reads graph.json; GRAPH_FORMAT.md describes it, graph.schema.json is its JSON Schema.
#include <array>
#include <optional>
#include <string_view>
#include <utility>

#include "leadsman/bundle.h"
#include "leadsman/error.h"
#include "loaders/bundle_files.h"
#include "loaders/json_cursor.h"
#include "loaders/json_text.h"
#include "loaders/preprocess_json.h"
#include "loaders/text.h"

namespace leadsman {
namespace {

using loaders::in_quotes;
using loaders::Json;
using loaders::JsonCursor;

constexpr std::int64_t kVersion = 1;
constexpr std::string_view kVersionKey = "leadsman_graph";
constexpr std::int64_t kMaxSize = std::int64_t{1} << 31;

// Sizes chosen when the model is planned have a letter, which names their place.
std::int64_t parse_free_size(const JsonCursor& value, std::size_t rank, std::size_t axis) {
  const std::string letter = value.text("a size or one of \"N\", \"H\", \"W\", \"T\"");
  struct Place {
    std::string_view letter;
    std::size_t rank, axis;  // rank 0: any
    std::string_view meaning;
  };
  static constexpr std::array<Place, 4> kPlaces = {
      {{"N", 0, 0, "the batch, the first size"},
       {"T", 3, 1, "the tokens, size 1 of [N, T, C]"},
       {"H", 4, 2, "the height, size 2 of [N, C, H, W]"},
       {"W", 4, 3, "the width, size 3 of [N, C, H, W]"}}};
  for (const Place& place : kPlaces) {
    if (place.letter != letter) continue;
    if (place.axis != axis || (place.rank != 0 && place.rank != rank)) {
      value.fail(in_quotes(letter) + " stands for " + std::string(place.meaning));
    }
    return GraphInput::kFree;
  }
  value.fail_type("a size or one of \"N\", \"H\", \"W\", \"T\"");
}

GraphInput parse_input(const JsonCursor& value) {
  value.expect_object({"name", "shape", "usual_size"});
  GraphInput input;
  input.name = value.member("name").text("a name");
  const std::vector<JsonCursor> sizes = value.member("shape").items("a list of sizes");
  for (std::size_t axis = 0; axis < sizes.size(); ++axis) {
    if (sizes[axis].value().is_string()) {
      input.shape.push_back(parse_free_size(sizes[axis], sizes.size(), axis));
      continue;
    }
    const std::int64_t size = sizes[axis].size("a size of 1 or more");
    if (size > kMaxSize) sizes[axis].fail("the size " + std::to_string(size) + " is too big");
    input.shape.push_back(size);
  }
  if (!value.has("usual_size")) return input;
  const JsonCursor usual = value.member("usual_size");
  if (input.shape.size() != 4) usual.fail("only images [N, C, H, W] have a usual size");
  for (const JsonCursor& side : usual.items("a list [height, width]", 2)) {
    const std::int64_t size = side.size("a size of 1 or more");
    if (size > kMaxSize) side.fail("the size " + std::to_string(size) + " is too big");
    input.usual_size.push_back(size);
  }
  return input;
}

AttributeValue parse_attribute(const JsonCursor& value) {
  const Json& json = value.value();
  if (json.is_boolean()) return json.get<bool>();
  if (json.is_number_integer()) return value.integer("an integer");
  if (json.is_number()) return value.number("a number");
  if (json.is_string()) return value.text("a word");
  if (json.is_array()) {
    std::vector<std::int64_t> integers;
    for (const JsonCursor& item : value.items("a list of integers")) {
      integers.push_back(item.integer("an integer"));
    }
    return integers;
  }
  value.fail_type("true, false, a number, a word or a list of integers");
}

Layer parse_layer(const JsonCursor& value) {
  value.expect_object({"name", "operator", "inputs", "attributes", "weights"});
  Layer layer;
  layer.name = value.member("name").text("a name");
  layer.operator_name = value.member("operator").text("an operator's name");
  for (const JsonCursor& input : value.member("inputs").items("a list of names")) {
    layer.inputs.push_back(input.text("a name"));
  }
  if (value.has("attributes")) {
    const JsonCursor attributes = value.member("attributes");
    attributes.expect_object();
    for (const std::string& name : attributes.keys()) {
      layer.attributes.set(name, parse_attribute(attributes.member(name)));
    }
  }
  if (value.has("weights")) {
    const JsonCursor weights = value.member("weights");
    weights.expect_object();
    for (const std::string& role : weights.keys()) {
      std::string tensor = weights.member(role).text("a tensor's name");
      if (tensor.empty()) weights.member(role).fail("a tensor's name may not be empty");
      layer.weights.emplace(role, std::move(tensor));
    }
  }
  return layer;
}

// Before anything else, so that a newer file is called that and not a wrong one.
void check_version(const JsonCursor& root) {
  root.expect_object();
  if (!root.has(kVersionKey)) {
    root.fail("the key 'leadsman_graph' is missing: this is not a graph of leadsman's");
  }
  const JsonCursor version = root.member(std::string(kVersionKey));
  const std::int64_t number = version.integer("a version number");
  if (number != kVersion) {
    version.fail("version " + std::to_string(number) + " of the format; this build reads version " +
                 std::to_string(kVersion));
  }
}

}  // namespace

GraphDocument parse_graph(std::string_view text, const std::string& file_name) {
  if (text.size() > loaders::kMaxGraphBytes) {
    throw_input(file_name + ": holds " + std::to_string(text.size()) + " bytes, at most " +
                std::to_string(loaders::kMaxGraphBytes) + " are read");
  }
  Json json;
  try {
    json = loaders::parse_json(text);
  } catch (const Error& error) {
    throw_input(file_name + ": " + error.what());
  }
  const JsonCursor root(json, file_name);
  check_version(root);
  root.expect_object(
      {std::string(kVersionKey), "name", "inputs", "outputs", "layers", "preprocess"});
  GraphDocument document;
  Graph& graph = document.graph;
  graph.name = root.member("name").text("a name");
  if (graph.name.empty()) root.member("name").fail("a name may not be empty");
  for (const JsonCursor& input : root.member("inputs").items("a list of inputs")) {
    graph.inputs.push_back(parse_input(input));
  }
  for (const JsonCursor& output : root.member("outputs").items("a list of names")) {
    graph.outputs.push_back(output.text("a name"));
  }
  for (const JsonCursor& layer : root.member("layers").items("a list of layers")) {
    graph.layers.push_back(parse_layer(layer));
  }
  if (root.has("preprocess")) {
    document.preprocess = loaders::parse_preprocess(root.member("preprocess"));
  }
  try {
    check_graph(graph);
  } catch (const GraphError& error) {
    constexpr std::size_t kLongest = 400;
    throw_input(file_name + ": " + loaders::printable(error.path(), kLongest) + ": " +
                loaders::printable(error.what(), kLongest));
  }
  return document;
}

}  // namespace leadsman
