#include "ops/mul/mul.h"

#include "leadsman/error.h"
#include "ops/rows.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

// A float product is the exact one rounded once: no plainer form could differ.
class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : same_shape_(context.inputs[0] == context.inputs[1]),
        rows_(same_shape_ ? context.output.elements() : position_count(context.output)),
        channels_(same_shape_ ? 1 : channel_count(context.output)),
        rows_in_image_(same_shape_ ? 1 : context.output[2] * context.output[3]) {}

  bool runs_in_place() const override { return true; }

  void run(const KernelCall& call) const override {
    const float* a = call.inputs[0].data;
    const float* b = call.inputs[1].data;
    float* y = call.output.data;
    parallel_rows(call.threads, rows_, channels_, [&](std::int64_t begin, std::int64_t end) {
      if (same_shape_) {
        for (std::int64_t i = begin; i < end; ++i) y[i] = a[i] * b[i];
        return;
      }
      for (std::int64_t row = begin; row < end; ++row) {
        const float* factor = b + row / rows_in_image_ * channels_;
        const std::int64_t first = row * channels_;
        for (std::int64_t c = 0; c < channels_; ++c) y[first + c] = a[first + c] * factor[c];
      }
    });
  }

 private:
  bool same_shape_;
  std::int64_t rows_;
  std::int64_t channels_;
  std::int64_t rows_in_image_;
};

// Whether `factors` holds one value for each channel of `image`.
bool is_factor_of(const Shape& image, const Shape& factors) {
  return image.rank() == 4 && factors == Shape{image[0], image[1], 1, 1};
}

class Mul final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "mul",
        .meaning =
            "product of two tensors of one shape, or of an image and one factor a channel "
            "(Hu et al. 2018)",
        .min_inputs = 2,
        .max_inputs = 2,
        .attributes = {},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& a = context.inputs[0];
    const Shape& b = context.inputs[1];
    if (a == b || is_factor_of(a, b)) return a;
    std::string message = "input 2 has shape " + b.to_string() + ", expected " + a.to_string();
    if (is_factor_of(b, a)) {
      message += "; the larger input comes first";
    } else if (a.rank() == 4) {
      message += " or " + Shape{a[0], a[1], 1, 1}.to_string();
    }
    throw_input(message);
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& mul_operator() {
  static const Mul instance;
  return instance;
}

}  // namespace leadsman::ops
