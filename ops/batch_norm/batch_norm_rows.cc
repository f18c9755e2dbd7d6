// y = (x - mean) * scale + bias over rows of channels, in float. The mean is not merged into the
// bias: where it is large beside the deviation, the difference would cancel.
#include <cmath>

#include "ops/batch_norm/batch_norm.h"
#include "ops/rows.h"
#include "ops/simd/activation.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class RowsKernel final : public Kernel {
 public:
  RowsKernel(const OpContext& context, const Epilogue& epilogue)
      : rows_(position_count(context.output)),
        channels_(channel_count(context.output)),
        mean_(*context.weight("mean")),
        scale_(Shape{channels_}),
        bias_(context.weight("bias") ? *context.weight("bias") : Tensor(Shape{channels_})),
        epilogue_(epilogue) {
    simd::choose_target();
    const Tensor* weight = context.weight("weight");
    const Tensor& variance = *context.weight("variance");
    const double eps = context.attributes.number("eps");
    float* scale = scale_.mutable_data();
    for (std::int64_t c = 0; c < channels_; ++c) {
      const double factor = weight ? static_cast<double>(weight->data()[c]) : 1.0;
      scale[c] =
          static_cast<float>(factor / std::sqrt(static_cast<double>(variance.data()[c]) + eps));
    }
  }

  std::size_t packed_bytes() const override {
    return 3 * static_cast<std::size_t>(channels_) * sizeof(float);
  }
  bool runs_in_place() const override { return true; }

  void run(const KernelCall& call) const override {
    parallel_rows(call.threads, rows_, channels_, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t row = begin; row < end; ++row) {
        const float* x = call.inputs[0].data + row * channels_;
        float* y = call.output.data + row * channels_;
        if (epilogue_.has_residual) {
          normalise(x, call.residual + row * channels_, y);
        } else {
          normalise(x, y);
        }
      }
      if (epilogue_.activation.kind == ActivationKind::kNone) return;
      float* block = call.output.data + begin * channels_;
      simd::activate_row(epilogue_.activation, block, block, (end - begin) * channels_);
    });
  }

 private:
  void normalise(const float* x, float* y) const {
    const float* mean = mean_.data();
    const float* scale = scale_.data();
    const float* bias = bias_.data();
    for (std::int64_t c = 0; c < channels_; ++c) y[c] = (x[c] - mean[c]) * scale[c] + bias[c];
  }
  // One pass, because the residual may be the very input that is overwritten.
  void normalise(const float* x, const float* residual, float* y) const {
    const float* mean = mean_.data();
    const float* scale = scale_.data();
    const float* bias = bias_.data();
    for (std::int64_t c = 0; c < channels_; ++c) {
      y[c] = (x[c] - mean[c]) * scale[c] + bias[c] + residual[c];
    }
  }

  std::int64_t rows_;
  std::int64_t channels_;
  Tensor mean_;
  Tensor scale_;
  Tensor bias_;
  Epilogue epilogue_;
};

}  // namespace

const Strategy& batch_norm_rows() {
  static const StrategyOf<RowsKernel> instance("rows");
  return instance;
}

}  // namespace leadsman::ops
