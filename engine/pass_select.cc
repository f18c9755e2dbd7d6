#include <algorithm>

#include "core/threads.h"
#include "engine/plan_state.h"

namespace leadsman::internal {
namespace {

// Floats that are used again, so that large ones are not taken from the system each time.
class Scratch {
 public:
  Tensor take(const Shape& shape) {
    const auto wanted = static_cast<std::size_t>(shape.elements());
    const bool kept =
        floats_ != nullptr && floats_.use_count() > 1;  // by a kernel that packs nothing
    if (floats_ == nullptr || kept || floats_->size() < wanted) {
      floats_ = std::make_shared<std::vector<float>>(wanted);
    }
    return Tensor::borrow(shape, floats_->data(), floats_);
  }
  float* data() { return floats_->data(); }

 private:
  std::shared_ptr<std::vector<float>> floats_;
};

// In double, so that the weights are rounded once. Not before the kernel is made, which packs them:
// so no more than one layer's copy exists at a time.
void fold_affine(Step& step, int threads, Scratch& scratch) {
  const Tensor weight = *step.context.weight("weight");
  const Tensor* const bias = step.context.weight("bias");
  const std::int64_t channels = weight.shape()[0];
  const std::int64_t length = weight.elements() / channels;
  Tensor folded = scratch.take(weight.shape());
  std::vector<float> summands(static_cast<std::size_t>(channels));
  parallel_for(threads, channels, [&](std::int64_t o, int) {
    const auto at = static_cast<std::size_t>(o);
    const double factor = step.affine->factor[at];
    const float* from = weight.data() + o * length;
    std::transform(from, from + length, scratch.data() + o * length, [factor](float value) {
      return static_cast<float>(static_cast<double>(value) * factor);
    });
    const double before = bias != nullptr ? static_cast<double>(bias->data()[o]) : 0.0;
    summands[at] = static_cast<float>(before * factor + step.affine->summand[at]);
  });
  weight.release();
  step.context.weights["weight"] = std::move(folded);
  step.context.weights["bias"] = Tensor({channels}, std::move(summands));
  step.affine.reset();
}

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
  const KeepAwake awake(plan.options.threads,
                        plan.options.spin);  // between layers, which pack in parallel
  Scratch scratch;
  for (Step& step : plan.steps) {
    // A hook may overwrite what it sees, and the input may have other readers: an observed view is
    // computed as a copy, in place where it is the last reader.
    step.is_view = step.op->is_view(step.context) && !plan.values[step.output].observed;
    if (step.is_view) {
      step.strategy = "view";
      continue;
    }
    if (step.affine) fold_affine(step, plan.options.threads, scratch);
    step.context.direct_sums = plan.options.accuracy == Accuracy::kExact;
    select_kernel(step, plan.options.reference_kernels);
    plan.packed_bytes += step.kernel->packed_bytes();
    if (step.kernel->packed_bytes() == 0) {
      plan.weight_bytes += weights_size(step.context);
    } else {
      for (const auto& [role, tensor] : step.context.weights) tensor.release();
    }
    plan.workspace_bytes =
        std::max(plan.workspace_bytes, step.kernel->workspace_bytes(plan.options.threads));
    step.context.weights.clear();
  }
}

}  // namespace leadsman::internal
