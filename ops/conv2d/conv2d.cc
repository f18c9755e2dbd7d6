#include "ops/conv2d/conv2d.h"

#include <array>

#include "leadsman/error.h"
#include "ops/window.h"

namespace leadsman::ops {
namespace {

class Conv2d final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "conv2d",
        .meaning = "2-D convolution with groups, dilation and any padding (LeCun et al. 1989)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes =
            {
                kernel_size_spec(),
                stride_spec(),
                padding_spec("zeros around the image"),
                dilation_spec(),
                {.name = "groups",
                 .type = AttributeType::kInteger,
                 .fallback = std::int64_t{1},
                 .meaning = "independent groups of channels",
                 .minimum = 1,
                 .maximum = 1 << 24,
                 .choices = {}},
            },
        .weights = {{"weight", true, "[O, C/groups, kernel height, kernel width]"},
                    {"bias", false, "[O]"}},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {4});
    const Shape& weight = context.weight("weight")->shape();
    require_rank("weight", weight, {4});
    const auto& kernel = context.attributes.integers("kernel_size");
    const std::int64_t groups = context.attributes.integer("groups");
    const std::int64_t out_c = weight[0];
    if (input[1] % groups != 0 || out_c % groups != 0) {
      throw_input("groups is " + std::to_string(groups) + ", which does not divide " +
                  std::to_string(input[1]) + " input channels and " + std::to_string(out_c) +
                  " output channels");
    }
    require_shape("weight", weight, {out_c, input[1] / groups, kernel[0], kernel[1]});
    if (const Tensor* bias = context.weight("bias")) {
      require_shape("bias", bias->shape(), {out_c});
    }
    const WindowAttributes window(context.attributes);
    const auto [out_h, out_w] = window.output_size(input[2], input[3], /*ceil_mode=*/false);
    return {input[0], out_c, out_h, out_w};
  }

  Cost cost(const OpContext& context) const override {
    const Conv2dGeometry g(context);
    const std::int64_t reduction = g.group_in() * g.kernel_h * g.kernel_w;
    return {.macs = context.output.elements() * reduction, .reduction = reduction};
  }

  std::span<const Strategy* const> strategies() const override {
    static const std::array<const Strategy*, 6> all{&conv2d_winograd4(),  &conv2d_winograd2(),
                                                    &conv2d_depthwise3(), &conv2d_depthwise(),
                                                    &conv2d_implicit(),   &conv2d_reference()};
    return all;
  }

  bool takes_epilogue() const override { return true; }
};

}  // namespace

Conv2dGeometry::Conv2dGeometry(const OpContext& context) {
  const WindowAttributes window(context.attributes);
  n = context.inputs[0][0];
  c = context.inputs[0][1];
  h = context.inputs[0][2];
  w = context.inputs[0][3];
  out_c = context.output[1];
  out_h = context.output[2];
  out_w = context.output[3];
  kernel_h = window.kernel[0];
  kernel_w = window.kernel[1];
  stride_h = window.stride[0];
  stride_w = window.stride[1];
  dilation_h = window.dilation[0];
  dilation_w = window.dilation[1];
  pad_top = window.padding[0];
  pad_left = window.padding[1];
  pad_bottom = window.padding[2];
  pad_right = window.padding[3];
  groups = context.attributes.integer("groups");
}

const Operator& conv2d_operator() {
  static const Conv2d instance;
  return instance;
}

}  // namespace leadsman::ops
