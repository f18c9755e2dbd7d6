#include "ops/layer_norm/layer_norm.h"

#include <array>

namespace leadsman::ops {
namespace {

class LayerNorm final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "layer_norm",
        .meaning = "layer normalisation over the channels of each position (Ba et al. 2016)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {{.name = "eps",
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
    require_rank("input", input, {2, 3, 4});
    for (const char* role : {"weight", "bias"}) {
      if (const Tensor* tensor = context.weight(role)) {
        require_shape(role, tensor->shape(), {channel_count(input)});
      }
    }
    return input;
  }

  Cost cost(const OpContext& context) const override {
    return {.macs = 0, .reduction = channel_count(context.inputs[0])};
  }

  std::span<const Strategy* const> strategies() const override {
    static const std::array<const Strategy*, 2> all{&layer_norm_vector(), &layer_norm_reference()};
    return all;
  }
};

}  // namespace

const Operator& layer_norm_operator() {
  static const LayerNorm instance;
  return instance;
}

}  // namespace leadsman::ops
