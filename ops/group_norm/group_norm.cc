#include "ops/group_norm/group_norm.h"

#include <array>
#include <cmath>

#include "core/threads.h"
#include "leadsman/error.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

// A task is one group of one image: its mean, its variance about that, its values; sums in double.
class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : shape_(context.output),
        groups_(context.attributes.integer("groups")),
        eps_(context.attributes.number("eps")) {
    if (const Tensor* weight = context.weight("weight")) weight_ = *weight;
    if (const Tensor* bias = context.weight("bias")) bias_ = *bias;
  }

  bool runs_in_place() const override { return true; }

  void run(const KernelCall& call) const override {
    parallel_for(call.threads, shape_[0] * groups_, [&](std::int64_t task, int) {
      const std::int64_t area = shape_[2] * shape_[3];
      const std::int64_t first = task % groups_ * (shape_[1] / groups_);
      const std::int64_t offset = task / groups_ * area * shape_[1] + first;
      normalise(call.inputs[0].data + offset, first, area, call.output.data + offset);
    });
  }

 private:
  void normalise(const float* x, std::int64_t first, std::int64_t area, float* y) const {
    const std::int64_t channels = shape_[1];
    const std::int64_t in_group = channels / groups_;
    const auto sum = [&](auto term) {
      double total = 0.0;
      for (std::int64_t i = 0; i < area; ++i) {
        for (std::int64_t c = 0; c < in_group; ++c) {
          total += term(static_cast<double>(x[i * channels + c]));
        }
      }
      return total / static_cast<double>(area * in_group);
    };
    const double mean = sum([](double v) { return v; });
    const double variance = sum([mean](double v) { return (v - mean) * (v - mean); });
    const double scale = 1.0 / std::sqrt(variance + eps_);
    for (std::int64_t i = 0; i < area; ++i) {
      for (std::int64_t c = 0; c < in_group; ++c) {
        double value = (static_cast<double>(x[i * channels + c]) - mean) * scale;
        if (weight_.data()) value *= static_cast<double>(weight_.data()[first + c]);
        if (bias_.data()) value += static_cast<double>(bias_.data()[first + c]);
        y[i * channels + c] = static_cast<float>(value);
      }
    }
  }

  Shape shape_;
  std::int64_t groups_;
  double eps_;
  Tensor weight_, bias_;
};

class GroupNorm final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "group_norm",
        .meaning = "normalisation over all positions of a group of channels (Wu & He 2018)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {{.name = "groups",
                        .type = AttributeType::kInteger,
                        .fallback = {},
                        .meaning = "into how many groups neighbouring channels are put",
                        .minimum = 1,
                        .maximum = 1 << 20,
                        .choices = {}},
                       {.name = "eps",
                        .type = AttributeType::kNumber,
                        .fallback = 1e-5,
                        .meaning = "added to the variance",
                        .minimum = 0.0,
                        .choices = {}}},
        .weights = {{"weight", false, "[C], factor of each channel"},
                    {"bias", false, "[C], added to each channel"}},
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
    for (const char* role : {"weight", "bias"}) {
      if (const Tensor* tensor = context.weight(role)) {
        require_shape(role, tensor->shape(), {input[1]});
      }
    }
    return input;
  }

  Cost cost(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    const std::int64_t in_group = input[1] / context.attributes.integer("groups");
    return {.macs = 0, .reduction = in_group * input[2] * input[3]};
  }

  std::span<const Strategy* const> strategies() const override {
    static const StrategyOf<ReferenceKernel> reference("reference");
    static const std::array<const Strategy*, 2> all{&group_norm_rows(), &reference};
    return all;
  }
};

}  // namespace

const Operator& group_norm_operator() {
  static const GroupNorm instance;
  return instance;
}

}  // namespace leadsman::ops
