#include "tests/support/graph_builder.h"

#include <cmath>

namespace leadsman::testing {

std::string GraphBuilder::image(std::int64_t channels, std::int64_t height, std::int64_t width) {
  constexpr std::int64_t kFree = GraphInput::kFree;
  graph_.name = "small";
  graph_.inputs.push_back({"image", {kFree, channels, kFree, kFree}, {height, width}});
  return "image";
}

std::string GraphBuilder::layer(const std::string& name, const std::string& op,
                                std::vector<std::string> inputs,
                                std::vector<std::pair<std::string, AttributeValue>> attributes) {
  Layer layer{name, op, std::move(inputs), {}, {}};
  for (auto& [key, value] : attributes) layer.attributes.set(key, value);
  graph_.layers.push_back(std::move(layer));
  return name;
}

void GraphBuilder::weight(const std::string& layer, const std::string& role, const Shape& shape,
                          double low, double high) {
  for (Layer& each : graph_.layers) {
    if (each.name == layer) each.weights[role] = layer + "." + role;
  }
  weights_[layer + "." + role] = random_.tensor(shape, low, high);
}

std::string GraphBuilder::conv(const std::string& name, const std::string& input, std::int64_t in,
                               std::int64_t out, std::int64_t kernel, std::int64_t stride,
                               std::int64_t groups) {
  layer(name, "conv2d", {input},
        {{"kernel_size", kernel}, {"stride", stride}, {"padding", kernel / 2}, {"groups", groups}});
  const double bound = std::sqrt(6.0 / static_cast<double>(in / groups * kernel * kernel));
  weight(name, "weight", {out, in / groups, kernel, kernel}, -bound, bound);
  return name;
}

std::string GraphBuilder::batch_norm(const std::string& name, const std::string& input,
                                     std::int64_t channels) {
  layer(name, "batch_norm", {input});
  weight(name, "weight", {channels}, 0.5, 1.5);
  weight(name, "bias", {channels}, -0.2, 0.2);
  weight(name, "mean", {channels}, -0.2, 0.2);
  weight(name, "variance", {channels}, 0.5, 1.5);
  return name;
}

std::string GraphBuilder::linear(const std::string& name, const std::string& input, std::int64_t in,
                                 std::int64_t out) {
  layer(name, "linear", {input});
  const double bound = std::sqrt(3.0 / static_cast<double>(in));
  weight(name, "weight", {out, in}, -bound, bound);
  weight(name, "bias", {out}, -0.1, 0.1);
  return name;
}

std::string GraphBuilder::layer_norm(const std::string& name, const std::string& input,
                                     std::int64_t channels) {
  layer(name, "layer_norm", {input});
  weight(name, "weight", {channels}, 0.8, 1.2);
  weight(name, "bias", {channels}, -0.1, 0.1);
  return name;
}

std::string GraphBuilder::activation(const std::string& name, const std::string& input,
                                     const std::string& kind) {
  return layer(name, "activation", {input}, {{"kind", kind}});
}

GraphBuilder small_conv_net(std::uint64_t seed) {
  GraphBuilder b(seed);
  b.image(3, 24, 20);
  b.batch_norm("stem.bn", b.conv("stem.conv", "image", 3, 16, 3, 2), 16);
  b.activation("stem.relu", "stem.bn");
  b.layer("stem.pool", "max_pool", {"stem.relu"},
          {{"kernel_size", std::int64_t{3}},
           {"stride", std::int64_t{2}},
           {"padding", std::int64_t{1}}});
  // A block with an identity shortcut.
  b.batch_norm("a.bn1", b.conv("a.conv1", "stem.pool", 16, 16, 3), 16);
  b.activation("a.relu1", "a.bn1");
  b.batch_norm("a.bn2", b.conv("a.conv2", "a.relu1", 16, 16, 3), 16);
  b.layer("a.add", "add", {"a.bn2", "stem.pool"});
  b.activation("a.relu2", "a.add");
  // One whose shortcut is a convolution, computed after the main branch.
  b.batch_norm("b.bn1", b.conv("b.conv1", "a.relu2", 16, 32, 3, 2), 32);
  b.activation("b.relu1", "b.bn1", "relu6");
  b.batch_norm("b.bn2", b.conv("b.conv2", "b.relu1", 32, 32, 3, 1, 32), 32);
  b.batch_norm("b.down.bn", b.conv("b.down.conv", "a.relu2", 16, 32, 1, 2), 32);
  b.layer("b.add", "add", {"b.bn2", "b.down.bn"});
  b.activation("b.relu2", "b.add", "hard_swish");
  b.layer("pool", "adaptive_avg_pool", {"b.relu2"}, {{"output_size", std::int64_t{1}}});
  b.layer("flatten", "flatten", {"pool"});
  b.layer("dropout", "identity", {"flatten"});
  b.output(b.linear("head", "dropout", 32, 10));
  return b;
}

GraphBuilder small_scaled_net(std::uint64_t seed) {
  GraphBuilder b(seed);
  b.image(3, 7, 6);
  b.batch_norm("norm", b.conv("conv", "image", 3, 8, 3), 8);
  b.layer("affine", "scale", {"norm"}, {{"factor", 0.5}, {"offset", 0.25}});
  b.weight("affine", "weight", {8, 1, 1}, -1.5, 1.5);
  b.weight("affine", "bias", {8}, -0.2, 0.2);
  b.layer("layer_scale", "scale", {b.linear("fc", "affine", 8, 8)});
  b.weight("layer_scale", "weight", {8, 1, 1}, -1.5, 1.5);
  b.layer("add", "add", {"affine", "layer_scale"});
  b.activation("gelu", "add", "gelu");
  b.output(b.linear("head", b.layer("pool", "mean", {"gelu"}), 8, 10));
  return b;
}

GraphBuilder small_transformer(std::uint64_t seed) {
  constexpr std::int64_t kWidth = 24;
  GraphBuilder b(seed);
  b.image(3, 16, 16);
  b.layer("patches", "conv2d", {"image"},
          {{"kernel_size", std::int64_t{4}}, {"stride", std::int64_t{4}}});
  b.weight("patches", "weight", {kWidth, 3, 4, 4}, -0.2, 0.2);
  b.weight("patches", "bias", {kWidth}, -0.1, 0.1);
  b.layer("tokens", "image_to_tokens", {"patches"});
  b.layer("class", "class_token", {"tokens"});
  b.weight("class", "weight", {1, 1, kWidth}, -1.0, 1.0);
  b.layer("position", "position_embed", {"class", "patches"});
  b.weight("position", "weight", {1, 17, kWidth}, -0.5, 0.5);
  std::string x = "position";
  for (const std::string block : {"block0", "block1"}) {
    b.layer_norm(block + ".norm1", x, kWidth);
    b.linear(block + ".in_proj", block + ".norm1", kWidth, 3 * kWidth);
    b.layer(block + ".attention", "attention", {block + ".in_proj"}, {{"heads", std::int64_t{3}}});
    b.linear(block + ".out_proj", block + ".attention", kWidth, kWidth);
    b.layer(block + ".add1", "add", {x, block + ".out_proj"});
    b.layer_norm(block + ".norm2", block + ".add1", kWidth);
    b.linear(block + ".fc1", block + ".norm2", kWidth, 2 * kWidth);
    b.activation(block + ".gelu", block + ".fc1", "gelu");
    b.linear(block + ".fc2", block + ".gelu", 2 * kWidth, kWidth);
    x = b.layer(block + ".add2", "add", {block + ".add1", block + ".fc2"});
  }
  b.layer_norm("norm", x, kWidth);
  b.layer("select", "select", {"norm"}, {{"index", std::int64_t{0}}});
  b.output(b.linear("head", "select", kWidth, 10));
  return b;
}

}  // namespace leadsman::testing
