// Rewrites, each a small function that says whether it took the following step in.
#include <algorithm>
#include <optional>

#include "engine/plan_state.h"
#include "ops/activation/activation.h"

namespace leadsman::internal {
namespace {

class Fuser {
 public:
  explicit Fuser(PlanState& plan) : plan_(plan), absorbed_(plan.steps.size(), false) {
    readers_.resize(plan.values.size());
    producer_.assign(plan.values.size(), kNobody);
    for (std::size_t s = 0; s < plan.steps.size(); ++s) {
      producer_[plan.steps[s].output] = s;
      for (const ValueId input : plan.steps[s].inputs) readers_[input].push_back(s);
    }
  }

  void run() {
    for (std::size_t s = 0; s < plan_.steps.size(); ++s) {
      if (!absorbed_[s]) grow(s);
    }
    std::vector<Step> kept;
    for (std::size_t s = 0; s < plan_.steps.size(); ++s) {
      if (!absorbed_[s]) kept.push_back(std::move(plan_.steps[s]));
    }
    plan_.steps = std::move(kept);
  }

 private:
  static constexpr std::size_t kNobody = static_cast<std::size_t>(-1);

  // Takes in the only reader of the step's output, again and again.
  void grow(std::size_t s) {
    Step& step = plan_.steps[s];
    if (step.op->is_view(step.context)) return;
    while (true) {
      const Value& out = plan_.values[step.output];
      if (out.observed || out.is_output || readers_[step.output].size() != 1) return;
      const std::size_t r = readers_[step.output].front();
      Step& reader = plan_.steps[r];
      if (!(drop_identity(reader) || fold_affine(step, reader) || add_residual(s, reader) ||
            append_activation(step, reader))) {
        return;
      }
      step.layers.insert(step.layers.end(), reader.layers.begin(), reader.layers.end());
      step.output = reader.output;
      step.macs += reader.macs;
      producer_[step.output] = s;
      absorbed_[r] = true;
    }
  }

  static bool drop_identity(const Step& reader) { return reader.op->contract().name == "identity"; }

  // a (W x + b) + c is again of the form W' x + b' (for batch norm: Ioffe & Szegedy 2015).
  static bool fold_affine(Step& step, const Step& reader) {
    const std::string_view op = step.op->contract().name;
    if ((op != "conv2d" && op != "linear") || step.residual ||
        step.epilogue.activation.kind != ops::ActivationKind::kNone) {
      return false;
    }
    std::optional<ops::ChannelAffine> affine = reader.op->affine(reader.context);
    if (!affine) return false;
    if (step.affine) {  // maps one after the other
      for (std::size_t c = 0; c < affine->factor.size(); ++c) {
        affine->summand[c] += affine->factor[c] * step.affine->summand[c];
        affine->factor[c] *= step.affine->factor[c];
      }
    }
    step.affine = std::move(affine);
    return true;
  }

  // The other summand must exist by the time the step runs.
  bool add_residual(std::size_t s, const Step& reader) {
    Step& step = plan_.steps[s];
    if (reader.op->contract().name != "add" || step.op->contract().name == "add" ||
        !step.op->takes_epilogue() || step.residual ||
        step.epilogue.activation.kind != ops::ActivationKind::kNone) {
      return false;
    }
    const ValueId other = behind_views(reader.inputs[reader.inputs[0] == step.output ? 1 : 0], s);
    if (other == step.output) return false;
    if (producer_[other] != kNobody && producer_[other] >= s) return false;
    step.residual = other;
    step.epilogue.has_residual = true;
    return true;
  }

  // A view that comes after step `s` (an identity shortcut, say) holds bytes that may be there
  // before it. An observed one stays: a hook may overwrite it.
  ValueId behind_views(ValueId value, std::size_t s) const {
    while (producer_[value] != kNobody && producer_[value] >= s && !plan_.values[value].observed) {
      const Step& producer = plan_.steps[producer_[value]];
      if (!producer.op->is_view(producer.context) || producer.output != value) break;
      value = producer.inputs[0];
    }
    return value;
  }

  static bool append_activation(Step& step, const Step& reader) {
    if (reader.op->contract().name != "activation" || !step.op->takes_epilogue() ||
        step.epilogue.activation.kind != ops::ActivationKind::kNone) {
      return false;
    }
    step.epilogue.activation = ops::activation_of(reader.context.attributes);
    return true;
  }

  PlanState& plan_;
  std::vector<bool> absorbed_;
  std::vector<std::vector<std::size_t>> readers_;  // steps, by value
  std::vector<std::size_t> producer_;              // step, by value
};

}  // namespace

void fuse_steps(PlanState& plan) {
  Fuser(plan).run();
}

}  // namespace leadsman::internal
