#include "ops/adaptive_avg_pool/adaptive_avg_pool.h"

#include "ops/adaptive_window.h"
#include "ops/pixel_grid.h"
#include "ops/simd/pixel_grid.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

template <MeanOfPixels mean>
void mean_of_window(const PixelGrid& grid, std::int64_t channels, float* out) {
  mean(grid, channels, static_cast<double>(grid.rows * grid.columns), out);
}

class RowsKernel final : public AdaptiveKernel {
 public:
  explicit RowsKernel(const OpContext& context)
      : AdaptiveKernel(context, mean_of_window<simd::mean_of_pixels>) {
    simd::choose_target();
  }
};

class ReferenceKernel final : public AdaptiveKernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : AdaptiveKernel(context, mean_of_window<ops::mean_of_pixels>) {}
};

class AdaptiveAvgPool final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "adaptive_avg_pool",
        .meaning =
            "means that bring an image of any size to a given one; [1, 1] is the mean over "
            "the whole image (Lin et al. 2014)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {output_size_spec()},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    return adaptive_output_shape(context);
  }

  Cost cost(const OpContext& context) const override {
    const Shape& in = context.inputs[0];
    const Shape& out = context.output;
    return {.macs = 0, .reduction = longest_window(in[2], out[2]) * longest_window(in[3], out[3])};
  }

  std::span<const Strategy* const> strategies() const override {
    return rows_and_reference<RowsKernel, ReferenceKernel>();
  }
};

}  // namespace

const Operator& adaptive_avg_pool_operator() {
  static const AdaptiveAvgPool instance;
  return instance;
}

}  // namespace leadsman::ops
