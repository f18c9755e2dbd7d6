// y = (x - mean) * scale + bias over rows of channels, in float. The mean is not merged into the
// bias: where it is large beside the deviation, the difference would cancel.
#include <cmath>
#include <limits>

#include "ops/batch_norm/batch_norm.h"
#include "ops/rows.h"
#include "ops/simd/activation.h"
#include "ops/simd/channelwise.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

constexpr float kInfinity = std::numeric_limits<float>::infinity();
constexpr simd::Bounds kUnbounded{-kInfinity, kInfinity};

class RowsKernel final : public Kernel {
 public:
  RowsKernel(const OpContext& context, const Epilogue& epilogue)
      : rows_(position_count(context.output)),
        channels_(channel_count(context.output)),
        mean_(*context.weight("mean")),
        scale_(Shape{channels_}),
        bias_(context.weight("bias") ? *context.weight("bias") : Tensor(Shape{channels_})),
        epilogue_(epilogue),
        bounds_(simd::activation_bounds(epilogue.activation).value_or(kUnbounded)) {
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
    const simd::Normalise by{mean_.data(), scale_.data(), bias_.data(), bounds_.low, bounds_.high};
    parallel_rows(call.threads, rows_, channels_, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t at = begin * channels_; at < end * channels_; at += channels_) {
        simd::normalise_row(by, call.inputs[0].data + at,
                            epilogue_.has_residual ? call.residual + at : nullptr,
                            call.output.data + at, channels_);
      }
      if (simd::activation_bounds(epilogue_.activation)) return;
      float* block = call.output.data + begin * channels_;
      simd::activate_row(epilogue_.activation, block, block, (end - begin) * channels_);
    });
  }

 private:
  std::int64_t rows_;
  std::int64_t channels_;
  Tensor mean_;
  Tensor scale_;
  Tensor bias_;
  Epilogue epilogue_;
  simd::Bounds bounds_;
};

}  // namespace

const Strategy& batch_norm_rows() {
  static const StrategyOf<RowsKernel> instance("rows");
  return instance;
}

}  // namespace leadsman::ops
