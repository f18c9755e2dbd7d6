// Names within a bundle (GRAPH_FORMAT.md).
#pragma once

#include <cstddef>
#include <string>
#include <string_view>

namespace leadsman::loaders {

inline constexpr std::string_view kGraphKey = "leadsman_graph";
inline constexpr std::string_view kLabelsKey = "leadsman_labels";

/// Longer texts are errors. 4 MiB of graph.json are some 20,000 layers.
inline constexpr std::size_t kMaxGraphBytes = std::size_t{4} << 20;
inline constexpr std::size_t kMaxLabelsBytes = std::size_t{16} << 20;

struct BundleFiles {
  static constexpr const char* kGraph = "graph.json";

  explicit BundleFiles(const std::string& folder)
      : graph(folder + "/" + kGraph),
        weights(folder + "/weights.safetensors"),
        labels(folder + "/labels.txt"),
        reference(folder + "/reference.safetensors") {}

  std::string graph;
  std::string weights;
  std::string labels;
  std::string reference;
};

}  // namespace leadsman::loaders
