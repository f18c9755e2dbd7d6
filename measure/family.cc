// Which family a step belongs to, and the bytes it moves.
#include <algorithm>
#include <map>
#include <set>

#include "leadsman/sweep.h"

namespace leadsman {
namespace {

constexpr std::int64_t kFloat = sizeof(float);

const std::map<std::string, std::string>& families() {
  static const std::map<std::string, std::string> table{
      {"linear", "matrix product"},
      {"attention", "attention"},
      {"attention_weights", "attention"},
      {"window_attention", "attention"},
      {"batch_norm", "normalisation"},
      {"layer_norm", "normalisation"},
      {"group_norm", "normalisation"},
      {"local_response_norm", "normalisation"},
      {"l2_normalize", "normalisation"},
      {"activation", "activation"},
      {"softmax", "activation"},
      {"max_pool", "pooling"},
      {"avg_pool", "pooling"},
      {"adaptive_avg_pool", "pooling"},
      {"adaptive_max_pool", "pooling"},
      {"channel_pool", "pooling"},
      {"mean", "pooling"},
  };
  return table;
}

// A convolution whose filters see one channel each: [C, 1, kh, kw], more than one of them.
bool is_depthwise(const Layer& layer, const WeightMap& weights) {
  const auto role = layer.weights.find("weight");
  if (layer.operator_name != "conv2d" || role == layer.weights.end()) return false;
  const auto weight = weights.find(role->second);
  if (weight == weights.end()) return false;
  const Shape& shape = weight->second.shape();
  const auto groups = layer.attributes.integer("groups");
  return shape.rank() == 4 && shape[1] == 1 && groups > 1;
}

}  // namespace

std::string operator_family(const std::string& operator_name, bool depthwise) {
  if (operator_name == "conv2d") return depthwise ? "depthwise" : "convolution";
  const auto found = families().find(operator_name);
  return found == families().end() ? "others" : found->second;
}

std::vector<FamilyWork> step_work(const Graph& graph, const WeightMap& weights, const Plan& plan) {
  std::map<std::string, std::int64_t> elements;  // of every layer's output and graph input
  for (const LayerSummary& layer : plan.layers()) elements[layer.name] = layer.shape.elements();
  for (std::size_t i = 0; i < plan.input_names().size(); ++i) {
    elements[plan.input_names()[i]] = plan.input_shapes()[i].elements();
  }
  std::vector<FamilyWork> work;
  for (const StepSummary& step : plan.steps()) {
    const std::set<std::string> inside(step.layers.begin(), step.layers.end());
    std::set<std::string> read;
    std::set<std::string> tensors;
    bool depthwise = false;
    for (const std::string& name : step.layers) {
      const Layer& layer = *graph.find_layer(name);
      depthwise = depthwise || is_depthwise(layer, weights);
      for (const std::string& input : layer.inputs) {
        if (!inside.contains(input)) read.insert(input);
      }
      for (const auto& [role, tensor] : layer.weights) tensors.insert(tensor);
    }
    FamilyWork entry{operator_family(step.operator_name, depthwise), 0.0, step.macs,
                     kFloat * step.output.elements()};
    for (const std::string& name : read) entry.bytes += kFloat * elements[name];
    for (const std::string& name : tensors) {
      const auto weight = weights.find(name);
      if (weight != weights.end()) entry.bytes += kFloat * weight->second.elements();
    }
    work.push_back(std::move(entry));
  }
  return work;
}

}  // namespace leadsman
