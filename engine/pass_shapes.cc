#include <map>
#include <set>

#include "engine/plan_state.h"
#include "leadsman/error.h"
#include "leadsman/names.h"

namespace leadsman::internal {
namespace {

std::string layer_title(const Layer& layer) {
  return "layer '" + layer.name + "' (" + layer.operator_name + "): ";
}

const Tensor& find_weight(const WeightMap& weights, const Layer& layer, const std::string& role,
                          const std::string& tensor) {
  const auto found = weights.find(tensor);
  if (found != weights.end()) return found->second;
  std::vector<std::string> names;
  for (const auto& [name, value] : weights) names.push_back(name);
  const std::string nearest = nearest_name(tensor, names);
  throw_input(layer_title(layer) + role + ": there is no tensor '" + tensor + "'" +
              (nearest.empty() ? "" : "; nearest: '" + nearest + "'"));
}

void check_input_shape(const GraphInput& input, const Shape& shape) {
  const auto rank = static_cast<int>(input.shape.size());
  bool fits = shape.rank() == rank;
  for (int axis = 0; fits && axis < rank; ++axis) {
    const std::int64_t fixed = input.shape[static_cast<std::size_t>(axis)];
    fits = shape[axis] >= 1 && (fixed == GraphInput::kFree || shape[axis] == fixed);
  }
  if (fits) return;
  std::string expected;
  for (const std::int64_t size : input.shape) {
    expected += (expected.empty() ? "" : ", ") +
                (size == GraphInput::kFree ? std::string("any") : std::to_string(size));
  }
  throw_usage("input '" + input.name + "' cannot have shape " + shape.to_string() +
              ", the graph says [" + expected + "]");
}

LayerSummary summarize(const Step& step, const Layer& layer) {
  const ops::Cost cost = step.op->cost(step.context);
  LayerSummary summary{.name = layer.name,
                       .operator_name = layer.operator_name,
                       .shape = step.context.output,
                       .macs = cost.macs,
                       .activation_bytes = step.context.output.elements() * 4,
                       .reduction = cost.reduction};
  for (const ops::WeightSpec& spec : step.op->contract().weights) {
    const Tensor* weight = step.context.weight(spec.role);
    if (weight != nullptr && spec.trained) summary.parameters += weight->elements();
  }
  return summary;
}

std::int64_t count_parameters(const PlanState& plan) {
  std::set<std::string_view> counted;
  std::int64_t total = 0;
  for (std::size_t i = 0; i < plan.steps.size(); ++i) {
    for (const ops::WeightSpec& spec : plan.steps[i].op->contract().weights) {
      const auto tensor = plan.graph.layers[i].weights.find(spec.role);
      if (!spec.trained || tensor == plan.graph.layers[i].weights.end()) continue;
      if (!counted.insert(tensor->second).second) continue;
      total += plan.steps[i].context.weight(spec.role)->elements();
    }
  }
  return total;
}

}  // namespace

void infer_shapes(PlanState& plan, const WeightMap& weights) {
  std::map<std::string_view, ValueId> ids;
  const auto add_value = [&](const std::string& name, const Shape& shape) {
    const ValueId id = plan.values.size();
    plan.values.push_back({.name = name, .shape = shape, .storage = id});
    return id;
  };
  for (std::size_t i = 0; i < plan.graph.inputs.size(); ++i) {
    const GraphInput& input = plan.graph.inputs[i];
    check_input_shape(input, plan.input_shapes[i]);
    ids[input.name] = add_value(input.name, plan.input_shapes[i]);
    plan.input_names.push_back(input.name);
  }
  for (const Layer& layer : plan.graph.layers) {
    Step step;
    step.op = ops::find_operator(layer.operator_name);
    step.layers = {layer.name};
    step.context.attributes = layer.attributes;
    for (const std::string& input : layer.inputs) {
      step.inputs.push_back(ids.at(input));
      step.context.inputs.push_back(plan.values[ids.at(input)].shape);
    }
    for (const auto& [role, tensor] : layer.weights) {
      step.context.weights[role] = find_weight(weights, layer, role, tensor);
    }
    try {
      step.context.output = step.op->output_shape(step.context);
    } catch (const Error& error) {
      throw Error(error.kind(), layer_title(layer) + error.what());
    }
    step.output = add_value(layer.name, step.context.output);
    ids[layer.name] = step.output;
    plan.layers.push_back(summarize(step, layer));
    step.macs = plan.layers.back().macs;
    plan.steps.push_back(std::move(step));
  }
  for (const std::string& name : plan.graph.outputs) {
    plan.outputs.push_back(ids.at(name));
    plan.values[ids.at(name)].is_output = true;
  }
  plan.parameters = count_parameters(plan);
}

}  // namespace leadsman::internal
