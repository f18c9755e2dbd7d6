// Residual networks: He et al. 2016, table 1; with grouped 3x3 convolutions Xie et al. 2017,
// table 1; with wider ones Zagoruyko & Komodakis 2016. A block that halves the image does so in its
// 3x3 convolution (Goyal et al. 2017, section 5.1), as torchvision has it.
#include <array>

#include "loaders/architectures/families.h"

namespace leadsman::loaders {
namespace {

struct ResNet {
  bool bottleneck = true;
  std::array<int, 4> blocks = {};  ///< of each stage
  std::int64_t groups = 1;
  std::int64_t group_width = 64;  ///< channels of a group in the first stage's 3x3 convolutions
};

/// Convolution and batch norm: <path>conv<number>, <path>bn<number>.
std::string conv_norm(GraphWriter& w, const std::string& path, const std::string& number,
                      const std::string& input, std::int64_t out, const Convolution& convolution) {
  return w.batch_norm(path + "bn" + number,
                      w.conv(path + "conv" + number, input, out, convolution));
}

std::string relu(GraphWriter& w, const std::string& name, const std::string& input) {
  return w.activation(name, input, "relu");
}

/// Two 3x3 convolutions (He et al. 2016, figure 5, left).
std::string basic_branch(GraphWriter& w, const std::string& path, const std::string& input,
                         std::int64_t channels, std::int64_t stride) {
  const std::string x =
      conv_norm(w, path, "1", input, channels, {.kernel = 3, .stride = stride, .padding = 1});
  return conv_norm(w, path, "2", relu(w, path + "relu", x), channels, {.kernel = 3, .padding = 1});
}

/// 1x1, 3x3, 1x1 (He et al. 2016, figure 5, right).
std::string bottleneck_branch(GraphWriter& w, const std::string& path, const std::string& input,
                              std::int64_t channels, std::int64_t stride, const ResNet& net) {
  const std::int64_t width = channels * net.group_width / 64 * net.groups;
  std::string x = relu(w, path + "relu", conv_norm(w, path, "1", input, width, {}));
  x = conv_norm(w, path, "2", x, width,
                {.kernel = 3, .stride = stride, .padding = 1, .groups = net.groups});
  return conv_norm(w, path, "3", relu(w, path + "relu_1", x), 4 * channels, {});
}

std::string block(GraphWriter& w, const std::string& path, const std::string& input,
                  std::int64_t channels, std::int64_t stride, const ResNet& net) {
  const std::string branch = net.bottleneck
                                 ? bottleneck_branch(w, path, input, channels, stride, net)
                                 : basic_branch(w, path, input, channels, stride);
  std::string shortcut = input;
  if (stride != 1 || w.channels(input) != w.channels(branch)) {
    const std::string name = path + "downsample.";
    shortcut =
        w.batch_norm(name + "1", w.conv(name + "0", input, w.channels(branch), {.stride = stride}));
  }
  return relu(w, path + (net.bottleneck ? "relu_2" : "relu_1"),
              w.add(path + "add", branch, shortcut));
}

std::string write(GraphWriter& w, const ResNet& net) {
  std::string x = conv_norm(w, "", "1", "image", 64, {.kernel = 7, .stride = 2, .padding = 3});
  x = w.layer("maxpool", "max_pool", {relu(w, "relu", x)},
              {{"kernel_size", std::int64_t{3}},
               {"stride", std::int64_t{2}},
               {"padding", std::int64_t{1}}});
  for (std::size_t stage = 0; stage < net.blocks.size(); ++stage) {
    const std::string layer = "layer" + std::to_string(stage + 1) + ".";
    for (int i = 0; i < net.blocks[stage]; ++i) {
      const std::int64_t stride = stage > 0 && i == 0 ? 2 : 1;
      x = block(w, layer + std::to_string(i) + ".", x, std::int64_t{64} << stage, stride, net);
    }
  }
  x = w.layer("flatten", "flatten", {w.global_pool("avgpool", x)});
  return w.linear("fc", x, w.options().classes);
}

template <ResNet net>
std::string of(GraphWriter& w) {
  return write(w, net);
}

constexpr std::string_view kHe = "He et al. 2016";
constexpr std::string_view kXie = "Xie et al. 2017";
constexpr std::string_view kZagoruyko = "Zagoruyko & Komodakis 2016";

constexpr std::array<Published, 10> kFamily = {{
    {"resnet18", kHe, of<ResNet{false, {2, 2, 2, 2}}>},
    {"resnet34", kHe, of<ResNet{false, {3, 4, 6, 3}}>},
    {"resnet50", kHe, of<ResNet{true, {3, 4, 6, 3}}>},
    {"resnet101", kHe, of<ResNet{true, {3, 4, 23, 3}}>},
    {"resnet152", kHe, of<ResNet{true, {3, 8, 36, 3}}>},
    {"resnext50_32x4d", kXie, of<ResNet{true, {3, 4, 6, 3}, 32, 4}>},
    {"resnext101_32x8d", kXie, of<ResNet{true, {3, 4, 23, 3}, 32, 8}>},
    {"resnext101_64x4d", kXie, of<ResNet{true, {3, 4, 23, 3}, 64, 4}>, 232},
    {"wide_resnet50_2", kZagoruyko, of<ResNet{true, {3, 4, 6, 3}, 1, 128}>},
    {"wide_resnet101_2", kZagoruyko, of<ResNet{true, {3, 4, 23, 3}, 1, 128}>},
}};

}  // namespace

std::span<const Published> resnet_family() {
  return kFamily;
}

}  // namespace leadsman::loaders
