#include "ops/attention/attention.h"

#include <array>
#include <cmath>

#include "leadsman/error.h"

namespace leadsman::ops {
namespace {

class Attention final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "attention",
        .meaning = "multi-head scaled dot-product attention (Vaswani et al. 2017)",
        .min_inputs = 1,
        .max_inputs = 3,
        .attributes = attention_attributes(),
        .weights = {attention_bias_spec()},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const AttentionGeometry g(context, true);
    return {g.n, g.t, g.c};
  }

  Cost cost(const OpContext& context) const override {
    const AttentionGeometry g(context, true);
    return {.macs = 2 * g.n * g.heads * g.t * g.s * g.d, .reduction = g.d + g.s};
  }

  std::span<const Strategy* const> strategies() const override {
    static const std::array<const Strategy*, 2> all{&attention_blocked(), &attention_reference()};
    return all;
  }
};

}  // namespace

AttentionGeometry::AttentionGeometry(const OpContext& context, bool values) {
  const auto& inputs = context.inputs;
  joint = inputs.size() == 1;
  if (!joint && inputs.size() != (values ? 3U : 2U)) {
    throw_input(values ? "takes q, k and v joint in one input or as three, not two inputs"
                       : "takes q, k and v joint in one input, or q and k, not three inputs");
  }
  const Shape& first = inputs[0];
  require_rank(joint ? "input" : "q", first, {3});
  n = first[0];
  t = first[1];
  s = t;
  c = first[2];
  if (joint) {
    if (c % 3 != 0) {
      throw_input("input has shape " + first.to_string() +
                  ", whose channels are not three times as many as q has");
    }
    c /= 3;
  } else {
    const Shape& k = inputs[1];
    require_rank("k", k, {3});
    s = k[1];
    require_shape("k", k, {n, s, c});
    if (values) require_shape("v", inputs[2], {n, s, c});
  }
  if (t < 1 || s < 1 || c < 1) throw_input("q, k or v of shape " + first.to_string() + " is empty");
  heads = context.attributes.integer("heads");
  if (heads > c || c % heads != 0) {
    throw_input("heads is " + std::to_string(heads) + ", which does not divide " +
                std::to_string(c) + " channels");
  }
  d = c / heads;
  const double given = context.attributes.number("scale");
  if (const Tensor* given_bias = context.weight("position_bias")) {
    bias = *given_bias;
    if (bias.shape() != Shape{heads, t, s} && bias.shape() != Shape{1, t, s}) {
      throw_input("position_bias has shape " + bias.shape().to_string() + ", expected " +
                  Shape{heads, t, s}.to_string() + " or " + Shape{1, t, s}.to_string() +
                  ": it fits one number of tokens");
    }
  }
  scale = static_cast<float>(given == 0.0 ? 1.0 / std::sqrt(static_cast<double>(d)) : given);
}

simd::HeadRows AttentionGeometry::rows(std::span<const ConstTensorView> inputs, Role role,
                                       std::int64_t image, std::int64_t head) const {
  const auto index = static_cast<std::int64_t>(role);
  if (joint)
    return {.data = inputs[0].data + image * t * 3 * c + index * c + head * d, .stride = 3 * c};
  const std::int64_t tokens = role == kQueries ? t : s;
  const float* data = inputs[static_cast<std::size_t>(index)].data;
  return {.data = data + image * tokens * c + head * d, .stride = c};
}

std::vector<AttributeSpec> attention_attributes() {
  return {{.name = "heads",
           .type = AttributeType::kInteger,
           .fallback = {},
           .meaning = "into how many heads the channels are split",
           .minimum = 1,
           .maximum = 1 << 20,
           .choices = {}},
          {.name = "scale",
           .type = AttributeType::kNumber,
           .fallback = 0.0,
           .meaning = "factor of the scores; 0 stands for 1 / sqrt(channels of a head)",
           .minimum = 0.0,
           .maximum = 1e30,
           .choices = {}}};
}

WeightSpec attention_bias_spec() {
  return {"position_bias", false, "[heads or 1, T, S], added to the scores"};
}

const Operator& attention_operator() {
  static const Attention instance;
  return instance;
}

}  // namespace leadsman::ops
