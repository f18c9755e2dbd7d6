#include "ops/adaptive_avg_pool/adaptive_avg_pool.h"

#include <algorithm>

#include "core/threads.h"
#include "leadsman/error.h"
#include "ops/pixel_grid.h"
#include "ops/simd/pixel_grid.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

std::int64_t window_begin(std::int64_t i, std::int64_t in, std::int64_t out) {
  return i * in / out;
}
std::int64_t window_end(std::int64_t i, std::int64_t in, std::int64_t out) {
  return ((i + 1) * in + out - 1) / out;
}
std::int64_t longest_window(std::int64_t in, std::int64_t out) {
  return std::min(in, in % out == 0 ? in / out : in / out + 2);
}

class AdaptiveAvgPoolKernel : public Kernel {
 public:
  AdaptiveAvgPoolKernel(const OpContext& context, MeanOfPixels mean)
      : in_(context.inputs[0]), out_(context.output), mean_(mean) {}

  // Tasks are an output row and a block of channels: the usual output has one row.
  void run(const KernelCall& call) const override {
    constexpr std::int64_t kBlock = 64;
    const std::int64_t blocks = (in_[1] + kBlock - 1) / kBlock;
    parallel_for(call.threads, out_[0] * out_[2] * blocks, [&](std::int64_t task, int) {
      const std::int64_t row = task / blocks;
      const std::int64_t c = task % blocks * kBlock;
      row_means(call.inputs[0].data + row / out_[2] * in_[2] * in_[3] * in_[1] + c, row % out_[2],
                std::min(kBlock, in_[1] - c), call.output.data + row * out_[3] * in_[1] + c);
    });
  }

 private:
  void row_means(const float* image, std::int64_t i, std::int64_t channels, float* out) const {
    const std::int64_t top = window_begin(i, in_[2], out_[2]);
    const std::int64_t rows = window_end(i, in_[2], out_[2]) - top;
    for (std::int64_t j = 0; j < out_[3]; ++j) {
      const std::int64_t left = window_begin(j, in_[3], out_[3]);
      const std::int64_t columns = window_end(j, in_[3], out_[3]) - left;
      mean_({.first = image + (top * in_[3] + left) * in_[1],
             .rows = rows,
             .columns = columns,
             .row_stride = in_[3] * in_[1],
             .column_stride = in_[1]},
            channels, static_cast<double>(rows * columns), out + j * in_[1]);
    }
  }

  Shape in_;
  Shape out_;
  MeanOfPixels mean_;
};

class RowsKernel final : public AdaptiveAvgPoolKernel {
 public:
  explicit RowsKernel(const OpContext& context)
      : AdaptiveAvgPoolKernel(context, simd::mean_of_pixels) {
    simd::choose_target();
  }
};

class ReferenceKernel final : public AdaptiveAvgPoolKernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : AdaptiveAvgPoolKernel(context, ops::mean_of_pixels) {}
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
        .attributes = {{.name = "output_size",
                        .type = AttributeType::kPair,
                        .fallback = {},
                        .meaning = "height and width of the output",
                        .minimum = 1,
                        .maximum = 65535,
                        .choices = {}}},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {4});
    if (input[2] < 1 || input[3] < 1) {
      throw_input("input has shape " + input.to_string() + ", which has no positions");
    }
    const auto& size = context.attributes.integers("output_size");
    return {input[0], input[1], size[0], size[1]};
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
