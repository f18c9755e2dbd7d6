#include "ops/pad/pad.h"

#include <algorithm>

#include "core/threads.h"
#include "leadsman/error.h"
#include "ops/strategy_of.h"
#include "ops/window.h"

namespace leadsman::ops {
namespace {

enum class Border { kConstant, kReflect, kReplicate };

Border border_of(const OpContext& context) {
  const std::string& mode = context.attributes.text("mode");
  if (mode == "reflect") return Border::kReflect;
  return mode == "replicate" ? Border::kReplicate : Border::kConstant;
}

// Where place `i` of the padded axis comes from; -1: from nowhere.
std::int64_t source(std::int64_t i, std::int64_t before, std::int64_t size, Border border) {
  i -= before;
  if (i >= 0 && i < size) return i;
  switch (border) {
    case Border::kReflect:
      return i < 0 ? -i : 2 * (size - 1) - i;
    case Border::kReplicate:
      return i < 0 ? 0 : size - 1;
    default:
      return -1;
  }
}

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : in_(context.inputs[0]),
        out_(context.output),
        top_(context.attributes.integers("padding")[0]),
        left_(context.attributes.integers("padding")[1]),
        value_(static_cast<float>(context.attributes.number("value"))),
        border_(border_of(context)) {}

  void run(const KernelCall& call) const override {
    const std::int64_t channels = in_[1];
    parallel_for(call.threads, out_[0] * out_[2], [&](std::int64_t row, int) {
      const float* image = call.inputs[0].data + row / out_[2] * in_[2] * in_[3] * channels;
      float* to = call.output.data + row * out_[3] * channels;
      const std::int64_t y = source(row % out_[2], top_, in_[2], border_);
      for (std::int64_t j = 0; j < out_[3]; ++j, to += channels) {
        const std::int64_t x = source(j, left_, in_[3], border_);
        if (y < 0 || x < 0) {
          std::fill_n(to, channels, value_);
        } else {
          std::copy_n(image + (y * in_[3] + x) * channels, channels, to);
        }
      }
    });
  }

 private:
  Shape in_, out_;
  std::int64_t top_, left_;
  float value_;
  Border border_;
};

class Pad final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "pad",
        .meaning = "rows and columns added at the sides of an image",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {{.name = "padding",
                        .type = AttributeType::kPadding,
                        .fallback = {},
                        .meaning = "how many at the top, left, bottom and right",
                        .minimum = 0,
                        .maximum = 65535,
                        .choices = {}},
                       {.name = "value",
                        .type = AttributeType::kNumber,
                        .fallback = 0.0,
                        .meaning = "of the pixels that are added in the mode constant",
                        .choices = {}},
                       {.name = "mode",
                        .type = AttributeType::kText,
                        .fallback = std::string("constant"),
                        .meaning = "what the pixels that are added are",
                        .choices = {"constant", "reflect", "replicate"}}},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {4});
    const auto& sides = context.attributes.integers("padding");
    const Border border = border_of(context);
    for (std::size_t i = 0; i < 4; ++i) {
      const std::int64_t size = input[i % 2 == 0 ? 2 : 3];
      const std::int64_t most = border == Border::kReflect ? size - 1 : size > 0 ? sides[i] : 0;
      if (border != Border::kConstant && sides[i] > most) {
        throw_input("padding of " + std::to_string(sides[i]) + " is too much for input of shape " +
                    input.to_string() + " in the mode " + context.attributes.text("mode"));
      }
    }
    return {input[0], input[1], input[2] + sides[0] + sides[2], input[3] + sides[1] + sides[3]};
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& pad_operator() {
  static const Pad instance;
  return instance;
}

}  // namespace leadsman::ops
