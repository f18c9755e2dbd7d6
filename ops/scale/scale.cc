#include "ops/scale/scale.h"

#include <array>

#include "ops/rows.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

ChannelAffine scale_affine(const OpContext& context) {
  const auto channels = static_cast<std::size_t>(channel_count(context.inputs[0]));
  ChannelAffine affine{std::vector<double>(channels, context.attributes.number("factor")),
                       std::vector<double>(channels, context.attributes.number("offset"))};
  for (std::size_t c = 0; c < channels; ++c) {
    if (const Tensor* weight = context.weight("weight")) {
      affine.factor[c] *= static_cast<double>(weight->data()[c]);
    }
    if (const Tensor* bias = context.weight("bias")) {
      affine.summand[c] += static_cast<double>(bias->data()[c]);
    }
  }
  return affine;
}

class ScaleKernel : public Kernel {
 public:
  explicit ScaleKernel(const OpContext& context)
      : rows_(position_count(context.output)), channels_(channel_count(context.output)) {}

  bool runs_in_place() const override { return true; }

 protected:
  std::int64_t rows_;
  std::int64_t channels_;
};

// Factor and summand of each channel rounded once, then float.
class RowsKernel final : public ScaleKernel {
 public:
  explicit RowsKernel(const OpContext& context) : ScaleKernel(context) {
    const ChannelAffine affine = scale_affine(context);
    factor_.assign(affine.factor.begin(), affine.factor.end());
    summand_.assign(affine.summand.begin(), affine.summand.end());
  }

  std::size_t packed_bytes() const override {
    return (factor_.size() + summand_.size()) * sizeof(float);
  }

  void run(const KernelCall& call) const override {
    const float* factor = factor_.data();
    const float* summand = summand_.data();
    parallel_rows(call.threads, rows_, channels_, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t row = begin; row < end; ++row) {
        const float* x = call.inputs[0].data + row * channels_;
        float* y = call.output.data + row * channels_;
        for (std::int64_t c = 0; c < channels_; ++c) y[c] = x[c] * factor[c] + summand[c];
      }
    });
  }

 private:
  std::vector<float> factor_;
  std::vector<float> summand_;
};

class ReferenceKernel final : public ScaleKernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : ScaleKernel(context), affine_(scale_affine(context)) {}

  void run(const KernelCall& call) const override {
    parallel_rows(call.threads, rows_, channels_, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t at = begin * channels_; at < end * channels_; ++at) {
        const auto c = static_cast<std::size_t>(at % channels_);
        call.output.data[at] = static_cast<float>(
            affine_.factor[c] * static_cast<double>(call.inputs[0].data[at]) + affine_.summand[c]);
      }
    });
  }

 private:
  ChannelAffine affine_;
};

// One value a channel, with sizes of 1 anywhere beside.
void require_one_a_channel(std::string_view what, const Shape& actual, std::int64_t channels) {
  if (actual.elements() == channels) {
    for (const std::int64_t size : actual.sizes()) {
      if (size == channels) return;
    }
  }
  require_shape(what, actual, {channels});
}

AttributeSpec number_spec(std::string_view name, double fallback, std::string_view meaning) {
  return {.name = name,
          .type = AttributeType::kNumber,
          .fallback = fallback,
          .meaning = meaning,
          .choices = {}};
}

class Scale final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "scale",
        .meaning = "each channel times a factor plus a summand (layer scale: Touvron et al. 2021)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {number_spec("factor", 1.0, "of all channels"),
                       number_spec("offset", 0.0, "added to all channels")},
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
        require_one_a_channel(role, tensor->shape(), channel_count(input));
      }
    }
    return input;
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return rows_and_reference<RowsKernel, ReferenceKernel>();
  }

  std::optional<ChannelAffine> affine(const OpContext& context) const override {
    return scale_affine(context);
  }
};

}  // namespace

const Operator& scale_operator() {
  static const Scale instance;
  return instance;
}

}  // namespace leadsman::ops
