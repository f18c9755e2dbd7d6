#include "ops/softmax/softmax.h"

#include <algorithm>
#include <cmath>
#include <limits>

#include "ops/rows.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : rows_(position_count(context.output)), channels_(channel_count(context.output)) {}

  bool runs_in_place() const override { return true; }

  void run(const KernelCall& call) const override {
    parallel_rows(call.threads, rows_, channels_, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t row = begin; row < end; ++row) {
        softmax(call.inputs[0].data + row * channels_, call.output.data + row * channels_);
      }
    });
  }

 private:
  // The exponentials are computed twice rather than kept: nothing may be rounded on the way. A NaN
  // makes the sum, and so the whole row, NaN; so does a row whose largest value is infinite.
  void softmax(const float* x, float* y) const {
    double largest = -std::numeric_limits<double>::infinity();
    for (std::int64_t c = 0; c < channels_; ++c) {
      largest = std::max(largest, static_cast<double>(x[c]));
    }
    double sum = 0.0;
    for (std::int64_t c = 0; c < channels_; ++c) {
      sum += std::exp(static_cast<double>(x[c]) - largest);
    }
    for (std::int64_t c = 0; c < channels_; ++c) {
      y[c] = static_cast<float>(std::exp(static_cast<double>(x[c]) - largest) / sum);
    }
  }

  std::int64_t rows_;
  std::int64_t channels_;
};

class Softmax final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "softmax",
        .meaning = "exponentials over the channels, normalised to a sum of 1 (Bridle 1990)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    require_rank("input", context.inputs[0], {2, 3, 4});
    return context.inputs[0];
  }

  Cost cost(const OpContext& context) const override {
    return {.macs = 0, .reduction = channel_count(context.inputs[0])};
  }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& softmax_operator() {
  static const Softmax instance;
  return instance;
}

}  // namespace leadsman::ops
