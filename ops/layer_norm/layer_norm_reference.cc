#include <cmath>

#include "core/threads.h"
#include "ops/layer_norm/layer_norm.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : positions_(position_count(context.output)),
        channels_(channel_count(context.output)),
        eps_(context.attributes.number("eps")) {
    if (const Tensor* weight = context.weight("weight")) weight_ = *weight;
    if (const Tensor* bias = context.weight("bias")) bias_ = *bias;
  }

  bool runs_in_place() const override { return true; }

  void run(const KernelCall& call) const override {
    const auto count = static_cast<double>(channels_);
    parallel_for(call.threads, positions_, [&](std::int64_t position, int) {
      const float* x = call.inputs[0].data + position * channels_;
      float* y = call.output.data + position * channels_;
      double mean = 0.0;
      for (std::int64_t c = 0; c < channels_; ++c) mean += static_cast<double>(x[c]) / count;
      double variance = 0.0;
      for (std::int64_t c = 0; c < channels_; ++c) {
        const double from_mean = static_cast<double>(x[c]) - mean;
        variance += from_mean * from_mean / count;
      }
      const double factor = 1.0 / std::sqrt(variance + eps_);
      for (std::int64_t c = 0; c < channels_; ++c) {
        double value = (static_cast<double>(x[c]) - mean) * factor;
        if (weight_.data() != nullptr) value *= static_cast<double>(weight_.data()[c]);
        if (bias_.data() != nullptr) value += static_cast<double>(bias_.data()[c]);
        y[c] = static_cast<float>(value);
      }
    });
  }

 private:
  std::int64_t positions_;
  std::int64_t channels_;
  double eps_;
  Tensor weight_;
  Tensor bias_;
};

}  // namespace

const Strategy& layer_norm_reference() {
  static const StrategyOf<ReferenceKernel> instance("reference");
  return instance;
}

}  // namespace leadsman::ops
