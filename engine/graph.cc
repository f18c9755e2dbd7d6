// Checks of a graph that need neither weights nor sizes, and the topological sort.
#include "leadsman/graph.h"

#include <algorithm>
#include <set>
#include <utility>

#include "leadsman/error.h"
#include "leadsman/names.h"
#include "ops/operator.h"

namespace leadsman {
namespace {

std::string layer_path(std::size_t index) {
  return "/layers/" + std::to_string(index);
}

std::string with_nearest(const std::string& message, std::string_view name,
                         const std::vector<std::string>& candidates) {
  const std::string nearest = nearest_name(name, candidates);
  return nearest.empty() ? message : message + "; nearest: '" + nearest + "'";
}

void check_name(const std::string& name, const std::string& path, std::set<std::string>& seen) {
  if (name.empty()) throw GraphError(path + "/name", "a name may not be empty");
  if (name.find(':') != std::string::npos) {
    throw GraphError(path + "/name", "'" + name + "': a name may not contain ':'");
  }
  if (!seen.insert(name).second) {
    throw GraphError(path + "/name", "'" + name + "' is used twice");
  }
}

void check_input(const GraphInput& input, const std::string& path) {
  const std::size_t rank = input.shape.size();
  if (rank < 2 || rank > 4) {
    throw GraphError(path + "/shape",
                     "has " + std::to_string(rank) + " sizes; features have 2, tokens 3, images 4");
  }
  for (std::size_t axis = 0; axis < rank; ++axis) {
    if (input.shape[axis] != GraphInput::kFree && input.shape[axis] < 1) {
      throw GraphError(path + "/shape/" + std::to_string(axis),
                       "the size " + std::to_string(input.shape[axis]) + " is below 1");
    }
  }
  for (std::size_t i = 0; i < input.usual_size.size(); ++i) {
    if (input.usual_size[i] < 1) {
      throw GraphError(path + "/usual_size/" + std::to_string(i),
                       "the size " + std::to_string(input.usual_size[i]) + " is below 1");
    }
  }
}

void check_layer(Layer& layer, const std::string& path, const std::vector<std::string>& names) {
  const ops::Operator* op = ops::find_operator(layer.operator_name);
  if (op == nullptr) {
    std::vector<std::string> known;
    for (const ops::Operator* each : ops::all_operators()) {
      known.emplace_back(each->contract().name);
    }
    throw GraphError(path + "/operator",
                     with_nearest("no operator is called '" + layer.operator_name + "'",
                                  layer.operator_name, known));
  }
  const ops::Contract& contract = op->contract();
  const auto inputs = static_cast<std::int64_t>(layer.inputs.size());
  if (inputs < contract.min_inputs || inputs > contract.max_inputs) {
    std::string expected = std::to_string(contract.min_inputs);
    if (contract.max_inputs > contract.min_inputs) expected = "at least " + expected;
    throw GraphError(path + "/inputs", std::string(contract.name) + " takes " + expected +
                                           " inputs, not " + std::to_string(inputs));
  }
  for (std::size_t i = 0; i < layer.inputs.size(); ++i) {
    if (!std::ranges::binary_search(names, layer.inputs[i])) {
      throw GraphError(path + "/inputs/" + std::to_string(i),
                       with_nearest("no layer or input is called '" + layer.inputs[i] + "'",
                                    layer.inputs[i], names));
    }
  }
  try {
    layer.attributes = ops::complete_attributes(contract, layer.attributes);
  } catch (const Error& error) {
    throw GraphError(path + "/attributes", error.what());
  }
  std::vector<std::string> roles;
  for (const ops::WeightSpec& spec : contract.weights) {
    roles.emplace_back(spec.role);
    if (spec.required && !layer.weights.contains(spec.role)) {
      throw GraphError(path + "/weights", std::string(contract.name) + " needs a '" +
                                              std::string(spec.role) + "' (" +
                                              std::string(spec.meaning) + ")");
    }
  }
  for (const auto& [role, tensor] : layer.weights) {
    if (std::ranges::find(roles, role) != roles.end()) continue;
    throw GraphError(
        path + "/weights/" + role,
        with_nearest(std::string(contract.name) + " has no weight '" + role + "'", role, roles));
  }
}

// Kahn's algorithm (1962), keeping the given order among layers that are ready.
void sort_layers(Graph& graph) {
  std::map<std::string_view, std::size_t> index;
  for (std::size_t i = 0; i < graph.layers.size(); ++i) index.emplace(graph.layers[i].name, i);
  std::vector<std::size_t> waiting(graph.layers.size(), 0);
  std::vector<std::vector<std::size_t>> readers(graph.layers.size());
  std::set<std::size_t> ready;
  for (std::size_t i = 0; i < graph.layers.size(); ++i) {
    for (const std::string& input : graph.layers[i].inputs) {
      const auto found = index.find(input);
      if (found == index.end()) continue;
      readers[found->second].push_back(i);
      ++waiting[i];
    }
    if (waiting[i] == 0) ready.insert(i);
  }
  std::vector<std::size_t> order;
  while (!ready.empty()) {
    const std::size_t i = *ready.begin();
    ready.erase(ready.begin());
    order.push_back(i);
    for (const std::size_t reader : readers[i]) {
      if (--waiting[reader] == 0) ready.insert(reader);
    }
  }
  if (order.size() != graph.layers.size()) {
    const auto stuck = static_cast<std::size_t>(
        std::ranges::find_if(waiting, [](std::size_t n) { return n > 0; }) - waiting.begin());
    throw GraphError(layer_path(stuck) + "/inputs",
                     "'" + graph.layers[stuck].name + "' waits for itself: there is a cycle");
  }
  std::vector<Layer> sorted;
  sorted.reserve(order.size());
  for (const std::size_t i : order) sorted.push_back(std::move(graph.layers[i]));
  graph.layers = std::move(sorted);
}

}  // namespace

const Layer* Graph::find_layer(std::string_view layer_name) const {
  const auto found = std::ranges::find(layers, layer_name, &Layer::name);
  return found == layers.end() ? nullptr : &*found;
}

void check_graph(Graph& graph) {
  if (graph.inputs.empty()) throw GraphError("/inputs", "a graph needs at least one input");
  if (graph.outputs.empty()) throw GraphError("/outputs", "a graph needs at least one output");
  std::set<std::string> seen;
  for (std::size_t i = 0; i < graph.inputs.size(); ++i) {
    const std::string path = "/inputs/" + std::to_string(i);
    check_name(graph.inputs[i].name, path, seen);
    check_input(graph.inputs[i], path);
  }
  for (std::size_t i = 0; i < graph.layers.size(); ++i) {
    check_name(graph.layers[i].name, layer_path(i), seen);
  }
  const std::vector<std::string> names(seen.begin(), seen.end());
  for (std::size_t i = 0; i < graph.layers.size(); ++i) {
    check_layer(graph.layers[i], layer_path(i), names);
  }
  std::set<std::string> outputs;
  for (std::size_t i = 0; i < graph.outputs.size(); ++i) {
    const std::string path = "/outputs/" + std::to_string(i);
    if (!std::ranges::binary_search(names, graph.outputs[i])) {
      throw GraphError(path, with_nearest("no layer is called '" + graph.outputs[i] + "'",
                                          graph.outputs[i], names));
    }
    if (!outputs.insert(graph.outputs[i]).second) {
      throw GraphError(path, "'" + graph.outputs[i] + "' is an output twice");
    }
  }
  sort_layers(graph);
}

}  // namespace leadsman
