#include "observe/threshold.h"

#include <algorithm>
#include <cmath>
#include <map>
#include <utility>
#include <vector>

#include "observe/single_layer.h"

namespace leadsman {
namespace {

constexpr double kUnitRoundoff = 0x1p-24;
constexpr double kSumConstant = 4.0;
constexpr double kFunctionUlps = 8.0;

double norm(const Tensor& tensor) {
  double sum = 0.0;
  for (const float value : tensor.values()) {
    sum += static_cast<double>(value) * static_cast<double>(value);
  }
  return std::sqrt(sum);
}

double rms(const Tensor& tensor) {
  return norm(tensor) / std::sqrt(std::max(1.0, static_cast<double>(tensor.elements())));
}

double ratio_or_one(double terms, double output) {
  const double ratio = output > 0.0 ? terms / output : 1.0;
  return std::isfinite(ratio) ? std::max(1.0, ratio) : 1.0;
}

Tensor squared(const Tensor& tensor) {
  Tensor square(tensor.shape());
  std::ranges::transform(tensor.values(), square.mutable_data(), [](float x) { return x * x; });
  return square;
}

struct Question {
  const Layer& layer;
  const WeightMap& weights;
  double reduction;
  std::span<const Tensor> inputs;
  const Tensor& output;
  int threads;

  const Tensor* weight(std::string_view role) const {
    const auto name = layer.weights.find(role);
    return name == layer.weights.end() ? nullptr : &weights.find(name->second)->second;
  }
};

// The same operator over squared weights and inputs gives the sums of squared products.
double squared_products_gain(const Question& q) {
  WeightMap squares;
  for (const auto& [role, name] : q.layer.weights) squares[name] = squared(*q.weight(role));
  const Tensor input = squared(q.inputs[0]);
  PlanOptions options;
  options.threads = q.threads;
  const Tensor sums = run_layer(q.layer, squares, {&input, 1}, options);
  double total = 0.0;
  for (const float value : sums.values()) total += static_cast<double>(value);
  return ratio_or_one(std::sqrt(total), norm(q.output));
}

// Of value i in logical order: channels are the last axis but for images.
std::int64_t channel_of(const Shape& shape, std::int64_t i) {
  const std::int64_t inner = shape.rank() == 4 ? shape[2] * shape[3] : 1;
  return i / inner % channel_count(shape);
}

// y = a x + b, a and b by channel: two terms.
template <typename Map>
double affine_gain(const Question& q, const Map& map_of_channel) {
  const Tensor& x = q.inputs[0];
  const std::int64_t channels = channel_count(x.shape());
  std::vector<std::pair<double, double>> maps;
  for (std::int64_t c = 0; c < channels; ++c) maps.push_back(map_of_channel(c));
  double total = 0.0;
  for (std::int64_t i = 0; i < x.elements(); ++i) {
    const auto [a, b] = maps[static_cast<std::size_t>(channel_of(x.shape(), i))];
    const double ax = a * static_cast<double>(x.data()[i]);
    total += ax * ax + b * b;
  }
  return ratio_or_one(std::sqrt(total), norm(q.output));
}

double at(const Question& q, const char* role, std::int64_t c, double otherwise) {
  const Tensor* w = q.weight(role);
  return w ? static_cast<double>(w->data()[c]) : otherwise;
}

double batch_norm_gain(const Question& q) {
  const double eps = q.layer.attributes.number("eps");
  return affine_gain(q, [&](std::int64_t c) {
    const double a = at(q, "weight", c, 1.0) / std::sqrt(at(q, "variance", c, 1.0) + eps);
    return std::pair(a, at(q, "bias", c, 0.0) - at(q, "mean", c, 0.0) * a);
  });
}

double scale_gain(const Question& q) {
  const double factor = q.layer.attributes.number("factor");
  const double offset = q.layer.attributes.number("offset");
  return affine_gain(q, [&](std::int64_t c) {
    return std::pair(factor * at(q, "weight", c, 1.0), offset + at(q, "bias", c, 0.0));
  });
}

// (x - mean) / std: what the mean takes away is lost.
double layer_norm_gain(const Question& q) {
  const Tensor& x = q.inputs[0];
  const bool image = x.shape().rank() == 4;
  const std::int64_t channels = channel_count(x.shape());
  const std::int64_t stride = image ? x.shape()[2] * x.shape()[3] : 1;
  const std::int64_t positions = position_count(x.shape());
  double total = 0.0;
  for (std::int64_t p = 0; p < positions; ++p) {
    const float* first =
        x.data() + (image ? p / stride * channels * stride + p % stride : p * channels);
    double sum = 0.0;
    double squares = 0.0;
    for (std::int64_t c = 0; c < channels; ++c) {
      const double value = static_cast<double>(first[c * stride]);
      sum += value;
      squares += value * value;
    }
    const double mean = sum / static_cast<double>(channels);
    const double mean_square = squares / static_cast<double>(channels);
    const double variance = std::max(mean_square - mean * mean, q.layer.attributes.number("eps"));
    total += mean_square / variance;
  }
  return std::max(1.0, std::sqrt(total / std::max(1.0, static_cast<double>(positions))));
}

// The same over groups of channels, which lie side by side in logical order.
double group_norm_gain(const Question& q) {
  const Tensor& x = q.inputs[0];
  const std::int64_t groups = x.shape()[0] * q.layer.attributes.integer("groups");
  const std::int64_t count = x.elements() / std::max<std::int64_t>(1, groups);
  double total = 0.0;
  for (std::int64_t g = 0; g < groups; ++g) {
    double sum = 0.0;
    double squares = 0.0;
    for (std::int64_t i = g * count; i < (g + 1) * count; ++i) {
      const double value = static_cast<double>(x.data()[i]);
      sum += value;
      squares += value * value;
    }
    const double mean = sum / static_cast<double>(count);
    const double mean_square = squares / static_cast<double>(count);
    const double variance = std::max(mean_square - mean * mean, q.layer.attributes.number("eps"));
    total += mean_square / variance;
  }
  return std::max(1.0, std::sqrt(total / std::max(1.0, static_cast<double>(groups))));
}

// The mean of K values of either sign.
double mean_gain(const Question& q) {
  return ratio_or_one(rms(q.inputs[0]) / std::sqrt(q.reduction), rms(q.output));
}

double sum_gain(const Question& q) {
  double squares = 0.0;
  for (const Tensor& input : q.inputs) squares += norm(input) * norm(input);
  return ratio_or_one(std::sqrt(squares), norm(q.output));
}

// Root mean square of channels [first, first + count).
double channel_rms(const Tensor& x, std::int64_t first, std::int64_t count) {
  double squares = 0.0;
  for (std::int64_t i = 0; i < x.elements(); ++i) {
    const std::int64_t c = channel_of(x.shape(), i);
    if (c < first || c >= first + count) continue;
    squares += static_cast<double>(x.data()[i]) * static_cast<double>(x.data()[i]);
  }
  const auto values = static_cast<double>(position_count(x.shape()) * count);
  return std::sqrt(squares / std::max(1.0, values));
}

// An error of a score is one of an exponent: it counts by its absolute size, which is that of a
// sum of d products q k * scale, and of the bias.
double attention_gain(const Question& q) {
  const bool joint = q.inputs.size() == 1;
  const std::int64_t last = channel_count(q.inputs[0].shape());
  const std::int64_t width = joint ? last / 3 : last;
  const auto heads = static_cast<double>(q.layer.attributes.integer("heads"));
  const double depth = static_cast<double>(width) / heads;
  const double given = q.layer.attributes.number("scale");
  const double scale = given == 0.0 ? 1.0 / std::sqrt(depth) : given;
  const double query = channel_rms(q.inputs[0], 0, width);
  const double key = joint ? channel_rms(q.inputs[0], width, width) : rms(q.inputs[1]);
  // sqrt(d) growth times the sqrt(d) products' root.
  double size = depth * query * key * scale;
  if (q.layer.operator_name == "window_attention" && q.layer.attributes.flag("cosine")) size = 1.0;
  if (const Tensor* factors = q.weight("head_scale")) size *= rms(*factors);
  if (const Tensor* bias = q.weight("position_bias")) size += rms(*bias);
  return std::max(1.0, size);
}

double shrink_gain(const Question& q) {
  return ratio_or_one(norm(q.inputs[0]), norm(q.output));
}

// One token of many: its share of the error may be larger than the mean.
double select_gain(const Question& q) {
  return 2.0 * ratio_or_one(rms(q.inputs[0]), rms(q.output));
}

using Gain = double (*)(const Question&);

Gain gain_of(const std::string& op) {
  static const std::map<std::string, Gain, std::less<>> gains{
      {"conv2d", squared_products_gain},
      {"linear", squared_products_gain},
      {"batch_norm", batch_norm_gain},
      {"layer_norm", layer_norm_gain},
      {"avg_pool", mean_gain},
      {"adaptive_avg_pool", mean_gain},
      {"mean", mean_gain},
      {"channel_pool", mean_gain},
      {"add", sum_gain},
      {"position_embed", shrink_gain},
      {"attention", attention_gain},
      {"attention_weights", attention_gain},
      {"window_attention", attention_gain},
      {"scale", scale_gain},
      {"group_norm", group_norm_gain},
      {"resize", shrink_gain},
      {"activation", shrink_gain},
      {"select", select_gain},
  };
  const auto found = gains.find(op);
  return found == gains.end() ? nullptr : found->second;
}

}  // namespace

RoundingModel rounding_model(const Layer& layer, const WeightMap& weights,
                             const LayerSummary& summary, std::span<const Tensor> inputs,
                             const Tensor& output, int threads) {
  const Question question{
      layer,  weights, static_cast<double>(std::max<std::int64_t>(summary.reduction, 1)),
      inputs, output,  threads};
  const Gain gain = gain_of(layer.operator_name);
  RoundingModel model;
  if (gain != nullptr) model.gain = gain(question);
  // A function's own error does not cancel: its gain matters to what flows in, not to what it adds.
  const double summed = layer.operator_name == "activation"
                            ? 1.0
                            : std::sqrt(question.reduction) * summary.rounding_growth * model.gain;
  model.own = kUnitRoundoff * (kSumConstant * summed + kFunctionUlps);
  return model;
}

}  // namespace leadsman
