#include <algorithm>

#include "core/threads.h"
#include "ops/activation/activation.h"
#include "ops/simd/activation.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class VectorKernel final : public Kernel {
 public:
  explicit VectorKernel(const OpContext& context)
      : count_(context.output.elements()), activation_(activation_of(context.attributes)) {
    simd::choose_target();
  }

  bool runs_in_place() const override { return true; }

  void run(const KernelCall& call) const override {
    constexpr std::int64_t kTask = 16384;  // 64 KB: some microseconds
    const float* input = call.inputs[0].data;
    parallel_for(call.threads, (count_ + kTask - 1) / kTask, [&](std::int64_t task, int) {
      const std::int64_t first = task * kTask;
      simd::activate_row(activation_, input + first, call.output.data + first,
                         std::min(kTask, count_ - first));
    });
  }

 private:
  std::int64_t count_;
  Activation activation_;
};

}  // namespace

const Strategy& activation_vector() {
  static const StrategyOf<VectorKernel> instance("vector");
  return instance;
}

}  // namespace leadsman::ops
