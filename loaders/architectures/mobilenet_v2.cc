// MobileNetV2: Sandler et al. 2018, table 2.
#include <algorithm>
#include <array>

#include "loaders/architectures/families.h"

namespace leadsman::loaders {
namespace {

/// A row of table 2: expansion factor, output channels, repeats, stride of the first.
struct Stage {
  std::int64_t expansion;
  std::int64_t channels;
  int repeats;
  std::int64_t stride;
};
constexpr std::array<Stage, 7> kStages = {{
    {1, 16, 1, 1},
    {6, 24, 2, 2},
    {6, 32, 3, 2},
    {6, 64, 4, 2},
    {6, 96, 3, 1},
    {6, 160, 3, 2},
    {6, 320, 1, 1},
}};

/// Convolution, batch norm and ReLU6: <path>.0, .1, .2.
std::string conv_norm_relu6(GraphWriter& w, const std::string& path, const std::string& input,
                            std::int64_t out, const Convolution& convolution) {
  const std::string x = w.conv(path + ".0", input, out, convolution);
  return w.activation(path + ".2", w.batch_norm(path + ".1", x), "relu6");
}

/// Inverted residual with a linear bottleneck (table 1).
std::string block(GraphWriter& w, const std::string& path, const std::string& input,
                  const Stage& stage, std::int64_t stride) {
  const std::int64_t hidden = w.channels(input) * stage.expansion;
  int step = 0;
  const auto next = [&] { return path + ".conv." + std::to_string(step++); };
  std::string x = input;
  if (stage.expansion != 1) x = conv_norm_relu6(w, next(), x, hidden, {});
  x = conv_norm_relu6(w, next(), x, hidden,
                      {.kernel = 3, .stride = stride, .padding = 1, .groups = hidden});
  x = w.conv(next(), x, stage.channels, {});
  x = w.batch_norm(next(), x);
  const bool residual = stride == 1 && w.channels(input) == stage.channels;
  return residual ? w.add(path + ".add", input, x) : x;
}

std::string write(GraphWriter& w) {
  std::string x =
      conv_norm_relu6(w, "features.0", "image", 32, {.kernel = 3, .stride = 2, .padding = 1});
  int index = 1;
  const auto next = [&] { return "features." + std::to_string(index++); };
  for (const Stage& stage : kStages) {
    for (int i = 0; i < stage.repeats; ++i) {
      x = block(w, next(), x, stage, i == 0 ? stage.stride : 1);
    }
  }
  x = conv_norm_relu6(w, next(), x, 1280, {});
  x = w.layer("flatten", "flatten", {w.global_pool("adaptive_avg_pool2d", x)});
  return w.linear("classifier.1", w.layer("classifier.0", "identity", {x}), w.options().classes);
}

constexpr std::array<Published, 1> kFamily = {{{"mobilenet_v2", "Sandler et al. 2018", write}}};

}  // namespace

std::span<const Published> mobilenet_family() {
  return kFamily;
}

}  // namespace leadsman::loaders
