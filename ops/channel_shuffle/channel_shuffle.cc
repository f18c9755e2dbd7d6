#include "ops/channel_shuffle/channel_shuffle.h"

#include "leadsman/error.h"
#include "ops/rows.h"
#include "ops/simd/interleave.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

// A position's channels: in_group of each group, then in turns.
using Interleave = void (*)(const float* in, std::int64_t stride, std::int64_t rows,
                            std::int64_t length, float* out);

void interleave_plainly(const float* in, std::int64_t stride, std::int64_t rows,
                        std::int64_t length, float* out) {
  for (std::int64_t i = 0; i < rows; ++i) {
    for (std::int64_t j = 0; j < length; ++j) out[j * rows + i] = in[i * stride + j];
  }
}

class ShuffleKernel : public Kernel {
 public:
  ShuffleKernel(const OpContext& context, Interleave interleave)
      : rows_(position_count(context.output)),
        groups_(context.attributes.integer("groups")),
        in_group_(context.output[1] / groups_),
        interleave_(interleave) {}

  void run(const KernelCall& call) const override {
    const std::int64_t channels = groups_ * in_group_;
    parallel_rows(call.threads, rows_, channels, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t row = begin; row < end; ++row) {
        interleave_(call.inputs[0].data + row * channels, in_group_, groups_, in_group_,
                    call.output.data + row * channels);
      }
    });
  }

 private:
  std::int64_t rows_, groups_, in_group_;
  Interleave interleave_;
};

class RowsKernel final : public ShuffleKernel {
 public:
  explicit RowsKernel(const OpContext& context) : ShuffleKernel(context, simd::interleave) {
    simd::choose_target();
  }
};

class ReferenceKernel final : public ShuffleKernel {
 public:
  explicit ReferenceKernel(const OpContext& context) : ShuffleKernel(context, interleave_plainly) {}
};

class ChannelShuffle final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "channel_shuffle",
        .meaning = "channels of groups interleaved (Zhang et al. 2018)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {{.name = "groups",
                        .type = AttributeType::kInteger,
                        .fallback = {},
                        .meaning = "how many groups of neighbouring channels there are",
                        .minimum = 1,
                        .maximum = 1 << 20,
                        .choices = {}}},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {4});
    const std::int64_t groups = context.attributes.integer("groups");
    if (input[1] % groups != 0) {
      throw_input("groups is " + std::to_string(groups) + ", which does not divide " +
                  std::to_string(input[1]) + " channels");
    }
    return input;
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return rows_and_reference<RowsKernel, ReferenceKernel>();
  }
};

}  // namespace

const Operator& channel_shuffle_operator() {
  static const ChannelShuffle instance;
  return instance;
}

}  // namespace leadsman::ops
