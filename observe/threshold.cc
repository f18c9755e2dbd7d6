#include "observe/threshold.h"

#include <algorithm>
#include <cmath>
#include <map>

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
  const Tensor sums = run_layer(q.layer, squares, {&input, 1}, q.threads, false);
  double total = 0.0;
  for (const float value : sums.values()) total += static_cast<double>(value);
  return ratio_or_one(std::sqrt(total), norm(q.output));
}

// y = a x + b': two terms, where b' = beta - mean * a.
double batch_norm_gain(const Question& q) {
  const Tensor& x = q.inputs[0];
  const std::int64_t channels = x.shape()[1];
  const std::int64_t area = x.elements() / (x.shape()[0] * channels);
  const double eps = q.layer.attributes.number("eps");
  double total = 0.0;
  for (std::int64_t plane = 0; plane < x.shape()[0] * channels; ++plane) {
    const std::int64_t c = plane % channels;
    const auto at = [&](const char* role, double otherwise) {
      const Tensor* w = q.weight(role);
      return w ? static_cast<double>(w->data()[c]) : otherwise;
    };
    const double a = at("weight", 1.0) / std::sqrt(at("variance", 1.0) + eps);
    const double b = at("bias", 0.0) - at("mean", 0.0) * a;
    for (std::int64_t i = 0; i < area; ++i) {
      const double ax = a * static_cast<double>(x.data()[plane * area + i]);
      total += ax * ax + b * b;
    }
  }
  return ratio_or_one(std::sqrt(total), norm(q.output));
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

// The mean of K values of either sign.
double mean_gain(const Question& q) {
  return ratio_or_one(rms(q.inputs[0]) / std::sqrt(q.reduction), rms(q.output));
}

double sum_gain(const Question& q) {
  double squares = 0.0;
  for (const Tensor& input : q.inputs) squares += norm(input) * norm(input);
  return ratio_or_one(std::sqrt(squares), norm(q.output));
}

// An error of a score is one of an exponent: it counts by its absolute size, which is that of a
// sum of d products q k * scale.
double score_size(const Question& q) {
  const double heads = static_cast<double>(q.layer.attributes.integer("heads"));
  const bool joint = q.inputs.size() == 1;
  const auto last = static_cast<double>(channel_count(q.inputs[0].shape()));
  const double depth = (joint ? last / 3.0 : last) / heads;
  const double given = q.layer.attributes.number("scale");
  const double scale = given == 0.0 ? 1.0 / std::sqrt(depth) : given;
  double query = rms(q.inputs[0]);
  double key = query;
  if (joint) {
    const auto third = static_cast<std::int64_t>(last) / 3;
    double q2 = 0.0;
    double k2 = 0.0;
    const std::int64_t positions = position_count(q.inputs[0].shape());
    for (std::int64_t p = 0; p < positions; ++p) {
      const float* row = q.inputs[0].data() + p * 3 * third;
      for (std::int64_t c = 0; c < third; ++c) {
        q2 += static_cast<double>(row[c]) * static_cast<double>(row[c]);
        k2 += static_cast<double>(row[third + c]) * static_cast<double>(row[third + c]);
      }
    }
    query = std::sqrt(q2 / static_cast<double>(positions * third));
    key = std::sqrt(k2 / static_cast<double>(positions * third));
  } else if (q.inputs.size() > 1) {
    key = rms(q.inputs[1]);
  }
  return depth * query * key * scale;  // sqrt(d) growth times the sqrt(d) products' root
}

double attention_gain(const Question& q) {
  return std::max(1.0, score_size(q));
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
      {"add", sum_gain},
      {"position_embed", shrink_gain},
      {"attention", attention_gain},
      {"attention_weights", attention_gain},
      {"activation", shrink_gain},
      {"select", select_gain},
  };
  const auto found = gains.find(op);
  return found == gains.end() ? nullptr : found->second;
}

}  // namespace

RoundingModel rounding_model(const Layer& layer, const WeightMap& weights, std::int64_t reduction,
                             std::span<const Tensor> inputs, const Tensor& output, int threads) {
  const Question question{
      layer,  weights, static_cast<double>(std::max<std::int64_t>(reduction, 1)),
      inputs, output,  threads};
  const Gain gain = gain_of(layer.operator_name);
  RoundingModel model;
  if (gain != nullptr) model.gain = gain(question);
  // A function's own error does not cancel: its gain matters to what flows in, not to what it adds.
  const double summed =
      layer.operator_name == "activation" ? 1.0 : std::sqrt(question.reduction) * model.gain;
  model.own = kUnitRoundoff * (kSumConstant * summed + kFunctionUlps);
  return model;
}

}  // namespace leadsman
