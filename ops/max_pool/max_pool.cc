#include "ops/max_pool/max_pool.h"

#include <algorithm>

#include "core/threads.h"
#include "ops/pixel_grid.h"
#include "ops/simd/pixel_grid.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"
#include "ops/window.h"

namespace leadsman::ops {
namespace {

// Taps of one window that lie inside the image, on one axis.
struct Taps {
  std::int64_t first, count;

  Taps(std::int64_t start, std::int64_t kernel, std::int64_t dilation, std::int64_t size) {
    const std::int64_t skipped = start < 0 ? (dilation - 1 - start) / dilation : 0;
    first = start + skipped * dilation;
    const std::int64_t below_size = first < size ? (size - 1 - first) / dilation + 1 : 0;
    count = std::max<std::int64_t>(0, std::min(kernel - skipped, below_size));
    if (count == 0) first = 0;
  }
};

class MaxPoolKernel : public Kernel {
 public:
  MaxPoolKernel(const OpContext& context, MaxOfPixels max)
      : window_(context.attributes), in_(context.inputs[0]), out_(context.output), max_(max) {}

  void run(const KernelCall& call) const override {
    const std::int64_t channels = in_[1];
    parallel_for(call.threads, out_[0] * out_[2], [&](std::int64_t row, int) {
      const float* image = call.inputs[0].data + row / out_[2] * in_[2] * in_[3] * channels;
      const Taps y = taps(0, row % out_[2]);
      for (std::int64_t j = 0; j < out_[3]; ++j) {
        const Taps x = taps(1, j);
        max_({.first = image + (y.first * in_[3] + x.first) * channels,
              .rows = y.count,
              .columns = x.count,
              .row_stride = window_.dilation[0] * in_[3] * channels,
              .column_stride = window_.dilation[1] * channels},
             channels, call.output.data + (row * out_[3] + j) * channels);
      }
    });
  }

 private:
  Taps taps(std::size_t axis, std::int64_t index) const {
    return {index * window_.stride[axis] - window_.padding[axis], window_.kernel[axis],
            window_.dilation[axis], in_[static_cast<int>(axis) + 2]};
  }

  WindowAttributes window_;
  Shape in_;
  Shape out_;
  MaxOfPixels max_;
};

class RowsKernel final : public MaxPoolKernel {
 public:
  explicit RowsKernel(const OpContext& context) : MaxPoolKernel(context, simd::max_of_pixels) {
    simd::choose_target();
  }
};

class ReferenceKernel final : public MaxPoolKernel {
 public:
  explicit ReferenceKernel(const OpContext& context) : MaxPoolKernel(context, ops::max_of_pixels) {}
};

class MaxPool final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "max_pool",
        .meaning = "largest value under a sliding window (Scherer et al. 2010)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {kernel_size_spec(),
                       pooling_stride_spec(),
                       padding_spec("positions around the image, which never count"),
                       dilation_spec(),
                       {.name = "ceil_mode",
                        .type = AttributeType::kFlag,
                        .fallback = false,
                        .meaning = "a last window that hangs over the edge counts too",
                        .choices = {}}},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {4});
    const WindowAttributes window(context.attributes);
    window.require_padding_below_kernel();
    const auto [h, w] =
        window.output_size(input[2], input[3], context.attributes.flag("ceil_mode"));
    return {input[0], input[1], h, w};
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return rows_and_reference<RowsKernel, ReferenceKernel>();
  }
};

}  // namespace

const Operator& max_pool_operator() {
  static const MaxPool instance;
  return instance;
}

}  // namespace leadsman::ops
