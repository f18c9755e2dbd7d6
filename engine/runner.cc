#include "leadsman/runner.h"

#include <algorithm>
#include <chrono>

#include "core/aligned_memory.h"
#include "core/threads.h"
#include "engine/plan_state.h"
#include "leadsman/error.h"
#include "leadsman/names.h"
#include "ops/memory_order.h"

namespace leadsman {
namespace {

using AlignedBytes = std::unique_ptr<std::byte, FreeAligned>;

AlignedBytes allocate(std::size_t bytes, const char* what) {
  AlignedBytes memory = allocate_aligned(bytes);
  if (memory == nullptr) {
    throw Error(ErrorKind::kMemory, std::string("not enough memory for the ") + what + ": " +
                                        std::to_string(bytes) + " bytes");
  }
  return memory;
}

using Clock = std::chrono::steady_clock;

void record(PartTime& time, Clock::duration elapsed) {
  const double seconds = std::chrono::duration<double>(elapsed).count();
  time.best_seconds = time.runs == 0 ? seconds : std::min(time.best_seconds, seconds);
  time.total_seconds += seconds;
  ++time.runs;
}

}  // namespace

struct Runner::State {
  AlignedBytes arena;
  AlignedBytes workspace;
  std::vector<TensorView> values;
  /// Storage that the calls' spans point into.
  std::vector<std::vector<ConstTensorView>> call_inputs;
  std::vector<ops::KernelCall> calls;
  std::vector<std::vector<Hook>> hooks;  // by step
  bool profiling = false;
  Profile profile;

  void call_hooks(std::size_t s, const std::string& layer, const TensorView& output) const {
    const HookedOutput hooked(layer, output);
    for (const Hook& hook : hooks[s]) hook(hooked);
  }
};

Runner::Runner(std::shared_ptr<const Plan> plan)
    : plan_(std::move(plan)), state_(std::make_unique<State>()) {
  const internal::PlanState& p = plan_->state();
  State& s = *state_;
  s.arena = allocate(p.arena_bytes, "activations");
  s.workspace = allocate(p.workspace_bytes, "workspace");
  for (const internal::Value& value : p.values) {
    s.values.push_back({reinterpret_cast<float*>(s.arena.get() + value.offset_bytes), value.shape});
  }
  s.hooks.resize(p.steps.size());
  s.call_inputs.resize(p.steps.size());
  for (std::size_t i = 0; i < p.steps.size(); ++i) {
    const internal::Step& step = p.steps[i];
    for (const internal::ValueId input : step.inputs) {
      s.call_inputs[i].emplace_back(s.values[input]);
    }
    s.calls.push_back({.inputs = s.call_inputs[i],
                       .output = s.values[step.output],
                       .residual = step.residual ? s.values[*step.residual].data : nullptr,
                       .workspace = s.workspace.get(),
                       .threads = p.options.threads});
  }
}

Runner::~Runner() = default;
Runner::Runner(Runner&&) noexcept = default;
Runner& Runner::operator=(Runner&&) noexcept = default;

// NOLINTNEXTLINE(performance-unnecessary-value-param): one copy for each layer that matches
void Runner::add_hook(std::string_view name_or_glob, Hook hook) {
  const internal::PlanState& p = plan_->state();
  bool matched = false;
  for (std::size_t s = 0; s < p.steps.size(); ++s) {
    if (p.steps[s].is_view || !matches_glob(name_or_glob, p.steps[s].layers.back())) continue;
    state_->hooks[s].push_back(hook);
    matched = true;
  }
  if (matched) return;
  const std::string name(name_or_glob);
  if (p.graph.find_layer(name) != nullptr) {
    throw_usage("layer '" + name +
                "' lies inside a fused step; name it in PlanOptions::observe to hook it");
  }
  const std::string nearest = nearest_name(name, plan_->observable());
  throw_usage("no layer that can be hooked matches '" + name + "'" +
              (nearest.empty() ? "" : "; nearest: '" + nearest + "'"));
}

void Runner::clear_hooks() {
  for (std::vector<Hook>& hooks : state_->hooks) hooks.clear();
}

void Runner::run(std::span<const Tensor> inputs) {
  const internal::PlanState& p = plan_->state();
  State& s = *state_;
  if (inputs.size() != p.input_shapes.size()) {
    throw_usage("the graph has " + std::to_string(p.input_shapes.size()) + " inputs, not " +
                std::to_string(inputs.size()));
  }
  const Clock::time_point begin = Clock::now();
  const KeepAwake awake(p.options.threads, p.options.spin);
  for (std::size_t i = 0; i < inputs.size(); ++i) {
    if (!(inputs[i].shape() == p.input_shapes[i])) {
      throw_usage("input '" + p.input_names[i] + "' has shape " + inputs[i].shape().to_string() +
                  ", the plan was made for " + p.input_shapes[i].to_string());
    }
    ops::to_memory_order(inputs[i].data(), s.values[i], p.options.threads);
  }
  Clock::duration parts{0};
  if (s.profiling) record(s.profile.input, parts = Clock::now() - begin);
  for (std::size_t i = 0; i < p.steps.size(); ++i) {
    const internal::Step& step = p.steps[i];
    if (step.is_view) continue;
    const Clock::time_point start = s.profiling ? Clock::now() : Clock::time_point{};
    step.kernel->run(s.calls[i]);
    if (s.profiling) {
      const Clock::duration elapsed = Clock::now() - start;
      record(s.profile.steps[i], elapsed);
      parts += elapsed;
    }
    if (!s.hooks[i].empty()) s.call_hooks(i, step.layers.back(), s.calls[i].output);
  }
  if (s.profiling) {
    const Clock::duration elapsed = Clock::now() - begin;
    record(s.profile.whole, elapsed);
    record(s.profile.plan, elapsed - parts);
  }
}

ConstTensorView Runner::output(std::size_t index) const {
  const internal::PlanState& p = plan_->state();
  if (index >= p.outputs.size()) {
    throw_usage("the graph has " + std::to_string(p.outputs.size()) + " outputs, there is no " +
                std::to_string(index));
  }
  return state_->values[p.outputs[index]];
}

void Runner::enable_profile(bool on) {
  state_->profiling = on;
  if (on) {
    state_->profile = {};
    state_->profile.steps.resize(plan_->state().steps.size());
  }
}

const Profile& Runner::profile() const {
  return state_->profile;
}

void HookedOutput::replace(const Tensor& value) const {
  if (!(value.shape() == view_.shape)) {
    throw_usage("layer '" + layer_ + "': its output has shape " + view_.shape.to_string() +
                ", it cannot be replaced by " + value.shape().to_string());
  }
  copy_from_logical(value.data(), view_);
}

}  // namespace leadsman
