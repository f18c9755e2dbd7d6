#include "ops/space_to_depth/space_to_depth.h"

#include <algorithm>

#include "core/threads.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : in_(context.inputs[0]),
        out_(context.output),
        height_(context.attributes.integers("block")[0]),
        width_(context.attributes.integers("block")[1]),
        columns_first_(context.attributes.text("order") == "columns") {}

  void run(const KernelCall& call) const override {
    parallel_for(call.threads, out_[0] * out_[2], [&](std::int64_t task, int) {
      const float* image = call.inputs[0].data + task / out_[2] * in_[1] * in_[2] * in_[3];
      float* row = call.output.data + task * out_[3] * out_[1];
      for (std::int64_t x = 0; x < out_[3]; ++x) {
        gather(image, task % out_[2] * height_, x * width_, row + x * out_[1]);
      }
    });
  }

 private:
  void gather(const float* image, std::int64_t top, std::int64_t left, float* out) const {
    const std::int64_t channels = in_[1];
    for (std::int64_t i = 0; i < height_ * width_; ++i) {
      const std::int64_t y = top + (columns_first_ ? i % height_ : i / width_);
      const std::int64_t x = left + (columns_first_ ? i / height_ : i % width_);
      if (y < in_[2] && x < in_[3]) {
        std::copy_n(image + (y * in_[3] + x) * channels, channels, out);
      } else {
        std::fill_n(out, channels, 0.0F);
      }
      out += channels;
    }
  }

  Shape in_, out_;
  std::int64_t height_, width_;
  bool columns_first_;
};

class SpaceToDepth final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "space_to_depth",
        .meaning =
            "blocks of positions as one position with all their channels (patch merging: "
            "Liu et al. 2021)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {{.name = "block",
                        .type = AttributeType::kPair,
                        .fallback = std::vector<std::int64_t>{2, 2},
                        .meaning = "height and width of a block",
                        .minimum = 1,
                        .maximum = 1024,
                        .choices = {}},
                       {.name = "order",
                        .type = AttributeType::kText,
                        .fallback = std::string("columns"),
                        .meaning = "whether a block is read column by column or row by row",
                        .choices = {"columns", "rows"}}},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {4});
    const auto& block = context.attributes.integers("block");
    return {input[0], input[1] * block[0] * block[1], (input[2] + block[0] - 1) / block[0],
            (input[3] + block[1] - 1) / block[1]};
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& space_to_depth_operator() {
  static const SpaceToDepth instance;
  return instance;
}

}  // namespace leadsman::ops
