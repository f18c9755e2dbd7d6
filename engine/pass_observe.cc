#include "engine/plan_state.h"
#include "leadsman/error.h"
#include "leadsman/names.h"

namespace leadsman::internal {
namespace {

constexpr std::string_view kWeightsSuffix = ":weights";

// The step that computes what an attention layer never stores: softmax(q k^T * scale).
Step weights_step(PlanState& plan, const Step& attention) {
  Step step;
  step.op = ops::find_operator("attention_weights");
  step.layers = {attention.layers.front() + std::string(kWeightsSuffix)};
  step.inputs = attention.inputs;
  if (step.inputs.size() == 3) step.inputs.pop_back();  // values play no part
  for (const ValueId input : step.inputs) step.context.inputs.push_back(plan.values[input].shape);
  for (const ops::AttributeSpec& spec : step.op->contract().attributes) {
    step.context.attributes.set(std::string(spec.name),
                                attention.context.attributes.values().find(spec.name)->second);
  }
  for (const ops::WeightSpec& spec : step.op->contract().weights) {
    if (const Tensor* weight = attention.context.weight(spec.role)) {
      step.context.weights[std::string(spec.role)] = *weight;
    }
  }
  step.context.output = step.op->output_shape(step.context);
  step.macs = step.op->cost(step.context).macs;
  step.output = plan.values.size();
  plan.values.push_back({.name = step.layers.front(),
                         .shape = step.context.output,
                         .observed = true,
                         .storage = step.output});
  return step;
}

}  // namespace

void mark_observed(PlanState& plan) {
  std::vector<Step> steps;
  std::vector<bool> used(plan.options.observe.size(), false);
  for (Step& step : plan.steps) {
    const std::string& name = step.layers.front();
    bool wants_weights = false;
    for (std::size_t i = 0; i < used.size(); ++i) {
      const std::string& pattern = plan.options.observe[i];
      if (pattern.find(':') == std::string::npos) {
        if (!matches_glob(pattern, name)) continue;
        plan.values[step.output].observed = true;
        used[i] = true;
      } else if (step.op->contract().name == "attention" &&
                 matches_glob(pattern, name + std::string(kWeightsSuffix))) {
        wants_weights = true;
        used[i] = true;
      }
    }
    steps.push_back(std::move(step));
    if (wants_weights) steps.push_back(weights_step(plan, steps.back()));
  }
  plan.steps = std::move(steps);
  for (std::size_t i = 0; i < used.size(); ++i) {
    if (used[i]) continue;
    std::vector<std::string> names;
    for (const Layer& layer : plan.graph.layers) names.push_back(layer.name);
    const std::string nearest = nearest_name(plan.options.observe[i], names);
    throw_usage("no layer matches '" + plan.options.observe[i] + "'" +
                (nearest.empty() ? "" : "; nearest: '" + nearest + "'"));
  }
}

}  // namespace leadsman::internal
