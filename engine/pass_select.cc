#include <algorithm>

#include "engine/plan_state.h"

namespace leadsman::internal {
namespace {

void select_kernel(Step& step, bool reference) {
  const auto strategies = step.op->strategies();
  const ops::Strategy* chosen = strategies.back();
  if (!reference) {
    for (const ops::Strategy* strategy : strategies) {
      const std::string refusal = strategy->refusal(step.context);
      if (refusal.empty()) {
        chosen = strategy;
        break;
      }
      step.refusals.push_back(std::string(strategy->name()) + ": " + refusal);
    }
  }
  step.strategy = chosen->name();
  step.rounding_growth = chosen->rounding_growth();
  step.kernel = chosen->prepare(step.context, step.epilogue);
}

std::size_t weights_size(const ops::OpContext& context) {
  std::size_t bytes = 0;
  for (const auto& [role, tensor] : context.weights) {
    bytes += static_cast<std::size_t>(tensor.elements()) * sizeof(float);
  }
  return bytes;
}

}  // namespace

void select_kernels(PlanState& plan) {
  for (Step& step : plan.steps) {
    // A hook may overwrite what it sees, and the input may have other readers: an observed view is
    // computed as a copy, in place where it is the last reader.
    step.is_view = step.op->is_view(step.context) && !plan.values[step.output].observed;
    if (step.is_view) {
      step.strategy = "view";
      continue;
    }
    step.context.direct_sums = plan.options.accuracy == Accuracy::kExact;
    select_kernel(step, plan.options.reference_kernels);
    plan.packed_bytes += step.kernel->packed_bytes();
    if (step.kernel->packed_bytes() == 0) plan.weight_bytes += weights_size(step.context);
    plan.workspace_bytes =
        std::max(plan.workspace_bytes, step.kernel->workspace_bytes(plan.options.threads));
    step.context.weights.clear();
  }
}

}  // namespace leadsman::internal
