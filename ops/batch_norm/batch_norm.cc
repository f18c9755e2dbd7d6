#include "ops/batch_norm/batch_norm.h"

#include <array>
#include <cmath>

namespace leadsman::ops {
namespace {

class BatchNorm final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "batch_norm",
        .meaning =
            "normalisation of each channel by its statistics over the training set "
            "(Ioffe & Szegedy 2015)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {{.name = "eps",
                        .type = AttributeType::kNumber,
                        .fallback = 1e-5,
                        .meaning = "added to the variance",
                        .minimum = 0,
                        .maximum = 1,
                        .choices = {}}},
        .weights = {{"weight", false, "[C], factor; 1 when absent"},
                    {"bias", false, "[C], summand; 0 when absent"},
                    {"mean", true, "[C], running mean", false},
                    {"variance", true, "[C], running variance", false}},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {2, 3, 4});
    for (const WeightSpec& spec : contract().weights) {
      if (const Tensor* weight = context.weight(spec.role)) {
        require_shape(spec.role, weight->shape(), {channel_count(input)});
      }
    }
    return input;
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    static const std::array<const Strategy*, 2> all{&batch_norm_rows(), &batch_norm_reference()};
    return all;
  }

  bool takes_epilogue() const override { return true; }

  // gamma (x - mean) / sqrt(variance + eps) + beta.
  std::optional<ChannelAffine> affine(const OpContext& context) const override {
    const Tensor* gamma = context.weight("weight");
    const Tensor* beta = context.weight("bias");
    const Tensor& mean = *context.weight("mean");
    const Tensor& variance = *context.weight("variance");
    const double eps = context.attributes.number("eps");
    ChannelAffine affine;
    for (std::int64_t c = 0; c < mean.elements(); ++c) {
      const double factor = (gamma ? static_cast<double>(gamma->data()[c]) : 1.0) /
                            std::sqrt(static_cast<double>(variance.data()[c]) + eps);
      affine.factor.push_back(factor);
      affine.summand.push_back((beta ? static_cast<double>(beta->data()[c]) : 0.0) -
                               static_cast<double>(mean.data()[c]) * factor);
    }
    return affine;
  }
};

}  // namespace

const Operator& batch_norm_operator() {
  static const BatchNorm instance;
  return instance;
}

}  // namespace leadsman::ops
