#include "ops/avg_pool/avg_pool.h"

#include <algorithm>

#include "core/threads.h"
#include "ops/pixel_grid.h"
#include "ops/simd/pixel_grid.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"
#include "ops/window.h"

namespace leadsman::ops {
namespace {

// One window on one axis: its part inside the image, and how much of it the divisor counts.
struct Extent {
  std::int64_t begin, end, counted;

  Extent(std::int64_t start, std::int64_t kernel, std::int64_t size, std::int64_t padding_behind,
         bool count_padding)
      : begin(std::max<std::int64_t>(start, 0)),
        end(std::min(start + kernel, size)),
        counted(count_padding ? std::min(start + kernel, size + padding_behind) - start
                              : end - begin) {}
};

class AvgPoolKernel : public Kernel {
 public:
  AvgPoolKernel(const OpContext& context, MeanOfPixels mean)
      : window_(context.attributes),
        count_padding_(context.attributes.flag("count_padding")),
        in_(context.inputs[0]),
        out_(context.output),
        mean_(mean) {}

  void run(const KernelCall& call) const override {
    const std::int64_t channels = in_[1];
    parallel_for(call.threads, out_[0] * out_[2], [&](std::int64_t row, int) {
      const float* image = call.inputs[0].data + row / out_[2] * in_[2] * in_[3] * channels;
      const Extent y = extent(0, row % out_[2]);
      for (std::int64_t j = 0; j < out_[3]; ++j) {
        const Extent x = extent(1, j);
        mean_({.first = image + (y.begin * in_[3] + x.begin) * channels,
               .rows = y.end - y.begin,
               .columns = x.end - x.begin,
               .row_stride = in_[3] * channels,
               .column_stride = channels},
              channels, static_cast<double>(y.counted * x.counted),
              call.output.data + (row * out_[3] + j) * channels);
      }
    });
  }

 private:
  Extent extent(std::size_t axis, std::int64_t index) const {
    return {index * window_.stride[axis] - window_.padding[axis], window_.kernel[axis],
            in_[static_cast<int>(axis) + 2], window_.padding[axis + 2], count_padding_};
  }

  WindowAttributes window_;
  bool count_padding_;
  Shape in_;
  Shape out_;
  MeanOfPixels mean_;
};

class RowsKernel final : public AvgPoolKernel {
 public:
  explicit RowsKernel(const OpContext& context) : AvgPoolKernel(context, simd::mean_of_pixels) {
    simd::choose_target();
  }
};

class ReferenceKernel final : public AvgPoolKernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : AvgPoolKernel(context, ops::mean_of_pixels) {}
};

class AvgPool final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "avg_pool",
        .meaning = "mean under a sliding window (LeCun et al. 1989)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {kernel_size_spec(),
                       pooling_stride_spec(),
                       padding_spec("zeros around the image"),
                       {.name = "ceil_mode",
                        .type = AttributeType::kFlag,
                        .fallback = false,
                        .meaning = "a last window that hangs over the edge counts too",
                        .choices = {}},
                       {.name = "count_padding",
                        .type = AttributeType::kFlag,
                        .fallback = true,
                        .meaning = "the divisor counts the padding under the window",
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

  Cost cost(const OpContext& context) const override {
    const WindowAttributes window(context.attributes);
    return {.macs = 0, .reduction = window.kernel[0] * window.kernel[1]};
  }

  std::span<const Strategy* const> strategies() const override {
    return rows_and_reference<RowsKernel, ReferenceKernel>();
  }
};

}  // namespace

const Operator& avg_pool_operator() {
  static const AvgPool instance;
  return instance;
}

}  // namespace leadsman::ops
