#include "ops/transpose/transpose.h"

#include <algorithm>

#include "core/threads.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

// Squares whose rows and columns both stay in the first-level cache.
class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context) : in_(context.inputs[0]) {}

  void run(const KernelCall& call) const override {
    constexpr std::int64_t kSide = 32;
    const std::int64_t tokens = in_[1];
    const std::int64_t channels = in_[2];
    const std::int64_t strips = (channels + kSide - 1) / kSide;
    parallel_for(call.threads, in_[0] * strips, [&](std::int64_t task, int) {
      const std::int64_t first = task % strips * kSide;
      const std::int64_t last = std::min(first + kSide, channels);
      const float* x = call.inputs[0].data + task / strips * tokens * channels;
      float* y = call.output.data + task / strips * tokens * channels;
      for (std::int64_t begin = 0; begin < tokens; begin += kSide) {
        for (std::int64_t c = first; c < last; ++c) {
          for (std::int64_t t = begin; t < std::min(begin + kSide, tokens); ++t) {
            y[c * tokens + t] = x[t * channels + c];
          }
        }
      }
    });
  }

 private:
  Shape in_;
};

class Transpose final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "transpose",
        .meaning = "tokens and channels change places (Tolstikhin et al. 2021)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {3});
    return {input[0], input[2], input[1]};
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& transpose_operator() {
  static const Transpose instance;
  return instance;
}

}  // namespace leadsman::ops
