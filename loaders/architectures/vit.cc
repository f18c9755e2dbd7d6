// Vision transformers: Dosovitskiy et al. 2021, section 3.1 and table 1 (B and L); Touvron et al.
// 2021, table 1 (Ti and S).
#include <algorithm>
#include <array>

#include "loaders/architectures/families.h"

namespace leadsman::loaders {
namespace {

struct ViT {
  std::int64_t width;
  std::int64_t heads;
  int depth;
};
constexpr ViT kTiny{192, 3, 12};
constexpr ViT kSmall{384, 6, 12};
constexpr ViT kBase{768, 12, 12};
constexpr ViT kLarge{1024, 16, 24};

constexpr double kEps = 1e-6;
constexpr double kPositionSpread = 0.5;

std::string layer_norm(GraphWriter& w, const std::string& name, const std::string& input) {
  return w.layer_norm(name, input, kEps, name);
}

/// Patches, class token and positions.
std::string embed(GraphWriter& w, std::int64_t width, std::int64_t patch) {
  const std::string grid =
      w.conv("conv_proj", "image", width, {.kernel = patch, .stride = patch, .bias = true});
  std::string x = w.layer("image_to_tokens", "image_to_tokens", {grid});
  x = w.layer("class_token", "class_token", {x});
  w.weight("weight", "class_token", {{1, 1, width}, 0.0, 1.0});
  const PictureSize& size = w.options().size;
  const std::int64_t side = std::max(size.height, size.width) / patch;
  x = w.layer("encoder.position_embed", "position_embed", {x, grid},
              {{"prefix_tokens", std::int64_t{1}}});
  w.weight("weight", "encoder.pos_embedding", {{1, 1 + side * side, width}, 0.0, kPositionSpread});
  return w.layer("encoder.dropout", "identity", {x});
}

/// Pre-norm self-attention and MLP (figure 1, right).
std::string block(GraphWriter& w, const std::string& path, const std::string& input,
                  const ViT& net) {
  const std::string attention = path + "self_attention.";
  std::string x = layer_norm(w, path + "ln_1", input);
  x = w.linear(attention + "in_proj", x, 3 * net.width, "_");
  x = w.layer(attention + "attention", "attention", {x}, {{"heads", net.heads}});
  w.set_channels(x, net.width);
  x = w.linear(attention + "out_proj", x, net.width);
  const std::string middle = w.add(path + "add", w.layer(path + "dropout", "identity", {x}), input);
  x = w.linear(path + "mlp.0", layer_norm(w, path + "ln_2", middle), 4 * net.width);
  x = w.layer(path + "mlp.2", "identity", {w.activation(path + "mlp.1", x, "gelu")});
  x = w.layer(path + "mlp.4", "identity", {w.linear(path + "mlp.3", x, net.width)});
  return w.add(path + "add_1", middle, x);
}

std::string write(GraphWriter& w, const ViT& net, std::int64_t patch) {
  std::string x = embed(w, net.width, patch);
  for (int i = 0; i < net.depth; ++i) {
    x = block(w, "encoder.layers.encoder_layer_" + std::to_string(i) + ".", x, net);
  }
  x = layer_norm(w, "encoder.ln", x);
  x = w.layer("select", "select", {x}, {{"index", std::int64_t{0}}});
  return w.linear("heads.head", x, w.options().classes);
}

template <ViT net, std::int64_t patch>
std::string of(GraphWriter& w) {
  return write(w, net, patch);
}

constexpr std::string_view kDosovitskiy = "Dosovitskiy et al. 2021";
constexpr std::string_view kTouvron = "Touvron et al. 2021";
// The code of Touvron et al. evaluates behind a bicubic resize to 256.
constexpr Interpolation kBicubic = Interpolation::kBicubic;
constexpr Interpolation kBilinear = Interpolation::kBilinear;

constexpr std::array<Published, 8> kFamily = {{
    {"vit_ti_16", kTouvron, of<kTiny, 16>, 256, kBicubic},
    {"vit_ti_32", kTouvron, of<kTiny, 32>, 256, kBicubic},
    {"vit_s_16", kTouvron, of<kSmall, 16>, 256, kBicubic},
    {"vit_s_32", kTouvron, of<kSmall, 32>, 256, kBicubic},
    {"vit_b_16", kDosovitskiy, of<kBase, 16>},
    {"vit_b_32", kDosovitskiy, of<kBase, 32>},
    {"vit_l_16", kDosovitskiy, of<kLarge, 16>, 242, kBilinear},
    {"vit_l_32", kDosovitskiy, of<kLarge, 32>},
}};

}  // namespace

std::span<const Published> vit_family() {
  return kFamily;
}

}  // namespace leadsman::loaders
