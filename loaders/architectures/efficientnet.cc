// EfficientNet-B0: Tan & Le 2019, table 1; its blocks are those of Tan et al. 2019 (MnasNet) with
// squeeze-and-excitation (Hu et al. 2018) and SiLU.
#include <array>

#include "loaders/architectures/families.h"

namespace leadsman::loaders {
namespace {

/// A row of table 1: expansion, kernel, stride of the first, output channels, layers.
struct Stage {
  std::int64_t expansion;
  std::int64_t kernel;
  std::int64_t stride;
  std::int64_t channels;
  int layers;
};
constexpr std::array<Stage, 7> kStages = {{
    {1, 3, 1, 16, 1},
    {6, 3, 2, 24, 2},
    {6, 5, 2, 40, 2},
    {6, 3, 2, 80, 3},
    {6, 5, 1, 112, 3},
    {6, 5, 2, 192, 4},
    {6, 3, 1, 320, 1},
}};

// Seeded gains. SiLU keeps a quarter of a small input's power and half of a large one's, so that at
// power 1 a deviation would grow from block to block; well above, it acts as ReLU does. The factors
// of squeeze-and-excitation stay near 1/2 for the same reason.
constexpr double kSiluGain = 3.0;
constexpr double kFactorGain = 0.25;

/// Convolution and batch norm: <path>.0, .1.
std::string conv_norm(GraphWriter& w, const std::string& path, const std::string& input,
                      std::int64_t out, const Convolution& convolution, double gain = 1.0) {
  return w.batch_norm(path + ".1", w.conv(path + ".0", input, out, convolution), gain);
}

std::string conv_norm_silu(GraphWriter& w, const std::string& path, const std::string& input,
                           std::int64_t out, const Convolution& convolution) {
  return w.activation(path + ".2", conv_norm(w, path, input, out, convolution, kSiluGain), "silu");
}

/// Factors for the channels, from their means (Hu et al. 2018, figure 2).
std::string squeeze_excite(GraphWriter& w, const std::string& path, const std::string& input,
                           std::int64_t squeezed) {
  std::string x = w.global_pool(path + ".avgpool", input);
  x = w.activation(path + ".activation", w.conv(path + ".fc1", x, squeezed, {.bias = true}),
                   "silu");
  x = w.conv(path + ".fc2", x, w.channels(input), {.bias = true, .gain = kFactorGain});
  return w.mul(path + ".mul", input, w.activation(path + ".scale_activation", x, "sigmoid"));
}

std::string block(GraphWriter& w, const std::string& path, const std::string& input,
                  const Stage& stage, std::int64_t stride) {
  const std::int64_t in = w.channels(input);
  const std::int64_t hidden = in * stage.expansion;
  int step = 0;
  const auto next = [&] { return path + ".block." + std::to_string(step++); };
  std::string x = input;
  if (stage.expansion != 1) x = conv_norm_silu(w, next(), x, hidden, {});
  x = conv_norm_silu(
      w, next(), x, hidden,
      {.kernel = stage.kernel, .stride = stride, .padding = stage.kernel / 2, .groups = hidden});
  x = squeeze_excite(w, next(), x, in / 4);
  x = conv_norm(w, next(), x, stage.channels, {});
  if (stride != 1 || in != stage.channels) return x;
  return w.add(path + ".add", w.layer(path + ".stochastic_depth", "identity", {x}), input);
}

std::string write(GraphWriter& w) {
  std::string x =
      conv_norm_silu(w, "features.0", "image", 32, {.kernel = 3, .stride = 2, .padding = 1});
  for (std::size_t stage = 0; stage < kStages.size(); ++stage) {
    const std::string path = "features." + std::to_string(stage + 1) + ".";
    for (int i = 0; i < kStages[stage].layers; ++i) {
      const std::int64_t stride = i == 0 ? kStages[stage].stride : 1;
      x = block(w, path + std::to_string(i), x, kStages[stage], stride);
    }
  }
  x = conv_norm_silu(w, "features.8", x, 1280, {});
  x = w.layer("flatten", "flatten", {w.global_pool("avgpool", x)});
  return w.linear("classifier.1", w.layer("classifier.0", "identity", {x}), w.options().classes);
}

constexpr std::array<Published, 1> kFamily = {
    {{"efficientnet_b0", "Tan & Le 2019", write, 256, Interpolation::kBicubic}}};

}  // namespace

std::span<const Published> efficientnet_family() {
  return kFamily;
}

}  // namespace leadsman::loaders
