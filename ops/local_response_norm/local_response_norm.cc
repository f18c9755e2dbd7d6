#include "ops/local_response_norm/local_response_norm.h"

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
        size_(context.attributes.integer("size")),
        alpha_(context.attributes.number("alpha")),
        beta_(context.attributes.number("beta")),
        k_(context.attributes.number("k")) {}

  void run(const KernelCall& call) const override {
    parallel_rows(call.threads, rows_, channels_, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t row = begin; row < end; ++row) {
        const float* x = call.inputs[0].data + row * channels_;
        float* y = call.output.data + row * channels_;
        for (std::int64_t c = 0; c < channels_; ++c) y[c] = normalised(x, c);
      }
    });
  }

 private:
  // An even window has its extra channel before c.
  float normalised(const float* x, std::int64_t c) const {
    const std::int64_t first = std::max<std::int64_t>(0, c - size_ / 2);
    const std::int64_t last = std::min(channels_ - 1, c + (size_ - 1) / 2);
    double squares = 0.0;
    for (std::int64_t i = first; i <= last; ++i) {
      squares += static_cast<double>(x[i]) * static_cast<double>(x[i]);
    }
    const double base = k_ + alpha_ * squares / static_cast<double>(size_);
    return static_cast<float>(static_cast<double>(x[c]) / std::pow(base, beta_));
  }

  std::int64_t rows_, channels_, size_;
  double alpha_, beta_, k_;
};

AttributeSpec number_spec(std::string_view name, double fallback, std::string_view meaning) {
  return {.name = name,
          .type = AttributeType::kNumber,
          .fallback = fallback,
          .meaning = meaning,
          .minimum = 0.0,
          .choices = {}};
}

class LocalResponseNorm final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "local_response_norm",
        .meaning = "channels inhibited by their neighbours (Krizhevsky et al. 2012)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {{.name = "size",
                        .type = AttributeType::kInteger,
                        .fallback = {},
                        .meaning = "how many channels are summed",
                        .minimum = 1,
                        .maximum = 65535,
                        .choices = {}},
                       number_spec("alpha", 1e-4, "factor of the mean square"),
                       number_spec("beta", 0.75, "exponent"),
                       number_spec("k", 1.0, "added to it")},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    require_rank("input", context.inputs[0], {4});
    return context.inputs[0];
  }

  Cost cost(const OpContext& context) const override {
    return {.macs = 0, .reduction = context.attributes.integer("size")};
  }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& local_response_norm_operator() {
  static const LocalResponseNorm instance;
  return instance;
}

}  // namespace leadsman::ops
