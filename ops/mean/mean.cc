#include "ops/mean/mean.h"

#include <algorithm>

#include "core/threads.h"
#include "leadsman/error.h"
#include "ops/pixel_grid.h"
#include "ops/simd/pixel_grid.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

std::int64_t positions_in_item(const Shape& input) {
  return input.rank() == 4 ? input[2] * input[3] : input[1];
}

class MeanKernel : public Kernel {
 public:
  MeanKernel(const OpContext& context, MeanOfPixels mean)
      : items_(context.inputs[0][0]),
        positions_(positions_in_item(context.inputs[0])),
        channels_(channel_count(context.inputs[0])),
        mean_(mean) {}

  void run(const KernelCall& call) const override {
    constexpr std::int64_t kBlock = 64;  // channels of a task
    const std::int64_t blocks = (channels_ + kBlock - 1) / kBlock;
    parallel_for(call.threads, items_ * blocks, [&](std::int64_t task, int) {
      const std::int64_t n = task / blocks;
      const std::int64_t c = task % blocks * kBlock;
      mean_({.first = call.inputs[0].data + n * positions_ * channels_ + c,
             .rows = 1,
             .columns = positions_,
             .row_stride = 0,
             .column_stride = channels_},
            std::min(kBlock, channels_ - c), static_cast<double>(positions_),
            call.output.data + n * channels_ + c);
    });
  }

 private:
  std::int64_t items_;
  std::int64_t positions_;
  std::int64_t channels_;
  MeanOfPixels mean_;
};

class RowsKernel final : public MeanKernel {
 public:
  explicit RowsKernel(const OpContext& context) : MeanKernel(context, simd::mean_of_pixels) {
    simd::choose_target();
  }
};

class ReferenceKernel final : public MeanKernel {
 public:
  explicit ReferenceKernel(const OpContext& context) : MeanKernel(context, ops::mean_of_pixels) {}
};

class Mean final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "mean",
        .meaning = "mean over all positions, per channel (Lin et al. 2014)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {{.name = "keep",
                        .type = AttributeType::kFlag,
                        .fallback = false,
                        .meaning = "keep the sizes of the positions, as 1",
                        .choices = {}}},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {3, 4});
    if (positions_in_item(input) < 1) {
      throw_input("input has shape " + input.to_string() + ", which has no positions");
    }
    const std::int64_t channels = channel_count(input);
    if (!context.attributes.flag("keep")) return {input[0], channels};
    if (input.rank() == 4) return {input[0], channels, 1, 1};
    return {input[0], 1, channels};
  }

  Cost cost(const OpContext& context) const override {
    return {.macs = 0, .reduction = positions_in_item(context.inputs[0])};
  }

  std::span<const Strategy* const> strategies() const override {
    return rows_and_reference<RowsKernel, ReferenceKernel>();
  }
};

}  // namespace

const Operator& mean_operator() {
  static const Mean instance;
  return instance;
}

}  // namespace leadsman::ops
