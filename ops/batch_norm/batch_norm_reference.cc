// The formula of batch_norm.h, value by value in double.
#include <cmath>

#include "ops/batch_norm/batch_norm.h"
#include "ops/rows.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class ReferenceKernel final : public Kernel {
 public:
  ReferenceKernel(const OpContext& context, const Epilogue& epilogue)
      : rows_(position_count(context.output)),
        channels_(channel_count(context.output)),
        eps_(context.attributes.number("eps")),
        mean_(*context.weight("mean")),
        variance_(*context.weight("variance")),
        epilogue_(epilogue) {
    if (const Tensor* weight = context.weight("weight")) weight_ = *weight;
    if (const Tensor* bias = context.weight("bias")) bias_ = *bias;
  }

  bool runs_in_place() const override { return true; }

  void run(const KernelCall& call) const override {
    parallel_rows(call.threads, rows_, channels_, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t at = begin * channels_; at < end * channels_; ++at) {
        double y = normalised(static_cast<double>(call.inputs[0].data[at]), at % channels_);
        if (epilogue_.has_residual) y += static_cast<double>(call.residual[at]);
        call.output.data[at] = static_cast<float>(activate(epilogue_.activation, y));
      }
    });
  }

 private:
  double normalised(double x, std::int64_t c) const {
    double y = (x - static_cast<double>(mean_.data()[c])) /
               std::sqrt(static_cast<double>(variance_.data()[c]) + eps_);
    if (weight_.data() != nullptr) y *= static_cast<double>(weight_.data()[c]);
    if (bias_.data() != nullptr) y += static_cast<double>(bias_.data()[c]);
    return y;
  }

  std::int64_t rows_;
  std::int64_t channels_;
  double eps_;
  Tensor mean_;
  Tensor variance_;
  Tensor weight_;
  Tensor bias_;
  Epilogue epilogue_;
};

}  // namespace

const Strategy& batch_norm_reference() {
  static const StrategyOf<ReferenceKernel> instance("reference");
  return instance;
}

}  // namespace leadsman::ops
