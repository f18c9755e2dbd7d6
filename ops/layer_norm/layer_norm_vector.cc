#include "ops/layer_norm/layer_norm.h"
#include "ops/rows.h"
#include "ops/simd/reduce.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class VectorKernel final : public Kernel {
 public:
  explicit VectorKernel(const OpContext& context)
      : positions_(position_count(context.output)),
        channels_(channel_count(context.output)),
        eps_(static_cast<float>(context.attributes.number("eps"))) {
    simd::choose_target();
    if (const Tensor* weight = context.weight("weight")) weight_ = *weight;
    if (const Tensor* bias = context.weight("bias")) bias_ = *bias;
  }

  bool runs_in_place() const override { return true; }

  void run(const KernelCall& call) const override {
    parallel_rows(call.threads, positions_, channels_, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t position = begin; position < end; ++position) {
        simd::layer_norm_row(call.inputs[0].data + position * channels_, weight_.data(),
                             bias_.data(), eps_, call.output.data + position * channels_,
                             channels_);
      }
    });
  }

 private:
  std::int64_t positions_;
  std::int64_t channels_;
  float eps_;
  Tensor weight_;
  Tensor bias_;
};

}  // namespace

const Strategy& layer_norm_vector() {
  static const StrategyOf<VectorKernel> instance("vector");
  return instance;
}

}  // namespace leadsman::ops
