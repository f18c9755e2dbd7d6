#include "ops/mean/mean.h"

#include "core/threads.h"
#include "leadsman/error.h"
#include "ops/strategy_of.h"
#include "ops/window_mean.h"

namespace leadsman::ops {
namespace {

std::int64_t positions_in_item(const Shape& input) {
  return input.rank() == 4 ? input[2] * input[3] : input[1];
}

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : items_(context.inputs[0][0]),
        positions_(positions_in_item(context.inputs[0])),
        channels_(channel_count(context.inputs[0])) {}

  void run(const KernelCall& call) const override {
    const std::int64_t blocks = (channels_ + kMeanChannels - 1) / kMeanChannels;
    parallel_for(call.threads, items_ * blocks, [&](std::int64_t task, int) {
      const std::int64_t n = task / blocks;
      const ImageMemory column{call.inputs[0].data + n * positions_ * channels_, 1, channels_};
      rectangle_mean(column, {0, 0, positions_, 1}, task % blocks * kMeanChannels,
                     static_cast<double>(positions_), call.output.data + n * channels_);
    });
  }

 private:
  std::int64_t items_;
  std::int64_t positions_;
  std::int64_t channels_;
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
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& mean_operator() {
  static const Mean instance;
  return instance;
}

}  // namespace leadsman::ops
