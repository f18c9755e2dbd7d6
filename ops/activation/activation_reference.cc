#include <algorithm>

#include "core/threads.h"
#include "ops/activation/activation.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : count_(context.output.elements()), activation_(activation_of(context.attributes)) {}

  bool runs_in_place() const override { return true; }

  void run(const KernelCall& call) const override {
    constexpr std::int64_t kTask = 4096;
    parallel_for(call.threads, (count_ + kTask - 1) / kTask, [&](std::int64_t task, int) {
      const std::int64_t end = std::min(count_, (task + 1) * kTask);
      for (std::int64_t i = task * kTask; i < end; ++i) {
        call.output.data[i] =
            static_cast<float>(activate(activation_, static_cast<double>(call.inputs[0].data[i])));
      }
    });
  }

 private:
  std::int64_t count_;
  Activation activation_;
};

}  // namespace

const Strategy& activation_reference() {
  static const StrategyOf<ReferenceKernel> instance("reference");
  return instance;
}

}  // namespace leadsman::ops
