// graph.json texts for tests: a small valid one, and pieces of it replaced.
#pragma once

#include <stdexcept>
#include <string>
#include <string_view>

namespace leadsman::testing {

/// Two convolutions, an activation and a sum, with everything that graph.json can say.
inline constexpr std::string_view kGraphText = R"({
  "leadsman_graph": 1,
  "name": "small",
  "inputs": [{"name": "image", "shape": ["N", 3, "H", "W"], "usual_size": [8, 6]}],
  "outputs": ["sum"],
  "layers": [
    {"name": "conv1", "operator": "conv2d", "inputs": ["image"],
     "attributes": {"kernel_size": 3, "padding": [1, 1]}, "weights": {"weight": "conv1.weight"}},
    {"name": "relu1", "operator": "activation", "inputs": ["conv1"],
     "attributes": {"kind": "relu"}},
    {"name": "conv2", "operator": "conv2d", "inputs": ["relu1"],
     "attributes": {"kernel_size": [3, 3], "padding": [1, 1, 1, 1], "stride": [1, 1]},
     "weights": {"weight": "conv2.weight", "bias": "conv2.bias"}},
    {"name": "sum", "operator": "add", "inputs": ["conv2", "relu1"]}
  ],
  "preprocess": {
    "resize": {"shorter_side": 10, "interpolation": "bicubic"}, "crop": [8, 6],
    "channels": "BGR", "orientation": "exif", "scale": 1, "mean": [1, 2, 3], "std": [4, 5, 6.5]
  }
}
)";

/// kGraphText with the first `from` replaced.
inline std::string graph_with(std::string_view from, std::string_view to) {
  std::string text(kGraphText);
  const std::size_t at = text.find(from);
  if (at == std::string::npos) throw std::logic_error("not in the graph: " + std::string(from));
  return text.replace(at, from.size(), to);
}

}  // namespace leadsman::testing
