#include "ops/l2_normalize/l2_normalize.h"

#include <algorithm>
#include <cmath>

#include "ops/rows.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : rows_(position_count(context.output)),
        channels_(channel_count(context.output)),
        eps_(context.attributes.number("eps")) {}

  bool runs_in_place() const override { return true; }

  void run(const KernelCall& call) const override {
    parallel_rows(call.threads, rows_, channels_, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t row = begin; row < end; ++row) {
        const float* x = call.inputs[0].data + row * channels_;
        float* y = call.output.data + row * channels_;
        double squares = 0.0;
        for (std::int64_t c = 0; c < channels_; ++c) {
          squares += static_cast<double>(x[c]) * static_cast<double>(x[c]);
        }
        const double norm = std::max(std::sqrt(squares), eps_);
        for (std::int64_t c = 0; c < channels_; ++c) {
          y[c] = static_cast<float>(static_cast<double>(x[c]) / norm);
        }
      }
    });
  }

 private:
  std::int64_t rows_, channels_;
  double eps_;
};

class L2Normalize final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "l2_normalize",
        .meaning = "the channels of each position divided by their Euclidean norm",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {{.name = "eps",
                        .type = AttributeType::kNumber,
                        .fallback = 1e-12,
                        .meaning = "the least that is divided by",
                        .minimum = 0.0,
                        .choices = {}}},
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

const Operator& l2_normalize_operator() {
  static const L2Normalize instance;
  return instance;
}

}  // namespace leadsman::ops
