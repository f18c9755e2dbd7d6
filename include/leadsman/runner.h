// Runs a plan: a loop over its steps, in memory set aside beforehand.
#pragma once

#include <memory>
#include <span>
#include <string_view>
#include <vector>

#include "leadsman/hooks.h"
#include "leadsman/plan.h"
#include "leadsman/profile.h"

namespace leadsman {

/// Owns the memory of one run at a time: use one Runner a thread, sharing the Plan. The results do
/// not depend on the number of threads, bit for bit.
class Runner {
 public:
  /// Sets the arena and workspace aside; throws Error(kMemory) when there is not enough.
  explicit Runner(std::shared_ptr<const Plan> plan);
  ~Runner();
  Runner(Runner&&) noexcept;
  Runner& operator=(Runner&&) noexcept;

  const Plan& plan() const { return *plan_; }

  /// Calls `hook` at each layer whose name matches, in execution order; hooks of one layer in the
  /// order they were added. Throws Error(kUsage) when nothing matches, or when a layer named
  /// without wildcards was not observed in the plan and lies inside a fused step.
  void add_hook(std::string_view name_or_glob, Hook hook);
  void clear_hooks();

  /// One logical tensor for each graph input, shaped as the plan says, else Error(kUsage).
  /// Allocates nothing, unless hooks do.
  void run(std::span<const Tensor> inputs);
  /// For one-input graphs.
  void run(const Tensor& input) { run(std::span<const Tensor>(&input, 1)); }

  /// Output `index` of the graph; valid until the next run.
  ConstTensorView output(std::size_t index = 0) const;

  /// From now on, time every step (two clock readings each).
  void enable_profile(bool on);
  /// Figures since enable_profile(true), one for each step.
  const Profile& profile() const;

 private:
  std::shared_ptr<const Plan> plan_;
  struct State;
  std::unique_ptr<State> state_;
};

}  // namespace leadsman
