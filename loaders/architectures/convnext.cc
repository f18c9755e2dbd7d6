// ConvNeXt: Liu et al. 2022, section 2 and the list of sizes in section 3.
#include <array>

#include "loaders/architectures/families.h"

namespace leadsman::loaders {
namespace {

struct ConvNeXt {
  std::int64_t width;  ///< channels of the first stage; each next one has twice as many
  std::array<int, 4> blocks;
};

constexpr double kEps = 1e-6;
constexpr double kLayerScale = 0.3;  // seeded; at 1e-6, where training begins, nothing would pass

std::string layer_norm(GraphWriter& w, const std::string& path, const std::string& input) {
  return w.layer_norm(path + ".layer_norm", input, kEps, path);
}

/// Depthwise 7x7, then a narrow-wide-narrow pair of linear layers (figure 4, right), scaled.
std::string block(GraphWriter& w, const std::string& path, const std::string& input) {
  const std::int64_t width = w.channels(input);
  const std::string layer = path + ".block.";
  std::string x =
      w.conv(layer + "0", input, width, {.kernel = 7, .padding = 3, .groups = width, .bias = true});
  x = w.linear(layer + "3", w.layer_norm(layer + "2", x, kEps, layer + "2"), 4 * width);
  x = w.linear(layer + "5", w.activation(layer + "4", x, "gelu"), width);
  x = w.scale(path + ".mul", x, path + ".layer_scale", {{width, 1, 1}, kLayerScale, 0.1});
  return w.add(path + ".add", w.layer(path + ".stochastic_depth", "identity", {x}), input);
}

std::string write(GraphWriter& w, const ConvNeXt& net) {
  int index = 0;
  const auto next = [&] { return "features." + std::to_string(index++); };
  std::string path = next();
  std::string x = w.conv(path + ".0", "image", net.width, {.kernel = 4, .stride = 4, .bias = true});
  x = layer_norm(w, path + ".1", x);
  for (std::size_t stage = 0; stage < net.blocks.size(); ++stage) {
    if (stage > 0) {
      path = next();
      x = w.conv(path + ".1", layer_norm(w, path + ".0", x), net.width << stage,
                 {.kernel = 2, .stride = 2, .bias = true});
    }
    path = next();
    for (int i = 0; i < net.blocks[stage]; ++i) x = block(w, path + "." + std::to_string(i), x);
  }
  x = layer_norm(w, "classifier.0", w.global_pool("avgpool", x));
  return w.linear("classifier.2", w.layer("classifier.1", "flatten", {x}), w.options().classes);
}

template <ConvNeXt net>
std::string of(GraphWriter& w) {
  return write(w, net);
}

constexpr std::string_view kLiu = "Liu et al. 2022";

constexpr std::array<Published, 4> kFamily = {{
    {"convnext_tiny", kLiu, of<ConvNeXt{96, {3, 3, 9, 3}}>, 236},
    {"convnext_small", kLiu, of<ConvNeXt{96, {3, 3, 27, 3}}>, 230},
    {"convnext_base", kLiu, of<ConvNeXt{128, {3, 3, 27, 3}}>, 232},
    {"convnext_large", kLiu, of<ConvNeXt{192, {3, 3, 27, 3}}>, 232},
}};

}  // namespace

std::span<const Published> convnext_family() {
  return kFamily;
}

}  // namespace leadsman::loaders
