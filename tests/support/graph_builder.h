// Graphs put together in a few lines, with seeded weights of a sensible size.
#pragma once

#include <string>
#include <utility>
#include <vector>

#include "leadsman/graph.h"
#include "tests/support/random.h"

namespace leadsman::testing {

class GraphBuilder {
 public:
  explicit GraphBuilder(std::uint64_t seed = 1) : random_(seed) {}

  /// Every function gives the layer's name, to be handed to the next.
  std::string image(std::int64_t channels, std::int64_t height, std::int64_t width);
  std::string conv(const std::string& name, const std::string& input, std::int64_t in,
                   std::int64_t out, std::int64_t kernel, std::int64_t stride = 1,
                   std::int64_t groups = 1);
  std::string batch_norm(const std::string& name, const std::string& input, std::int64_t channels);
  std::string linear(const std::string& name, const std::string& input, std::int64_t in,
                     std::int64_t out);
  std::string layer_norm(const std::string& name, const std::string& input, std::int64_t channels);
  std::string activation(const std::string& name, const std::string& input,
                         const std::string& kind = "relu");
  std::string layer(const std::string& name, const std::string& op, std::vector<std::string> inputs,
                    std::vector<std::pair<std::string, AttributeValue>> attributes = {});
  void weight(const std::string& layer, const std::string& role, const Shape& shape, double low,
              double high);
  void output(const std::string& name) { graph_.outputs.push_back(name); }

  Random& random() { return random_; }
  const Graph& graph() const { return graph_; }
  Graph& graph() { return graph_; }
  const WeightMap& weights() const { return weights_; }
  WeightMap& weights() { return weights_; }

 private:
  Random random_;
  Graph graph_;
  WeightMap weights_;
};

/// A residual network in small: stem with pooling, a plain and a downsampling block, depthwise
/// convolution, head. Input [N, 3, H, W], output "head" [N, 10].
GraphBuilder small_conv_net(std::uint64_t seed = 1);
/// Products followed by `scale`: a convolution with norm, and a linear layer over an image's
/// positions in a residual branch. Input [N, 3, H, W], output "head" [N, 10].
GraphBuilder small_scaled_net(std::uint64_t seed = 1);
/// A pre-norm vision transformer in small, patch 4, two blocks. Input [N, 3, 16, 16] or larger,
/// output "head" [N, 10]; the attention layers are "block0.attention" and "block1.attention".
GraphBuilder small_transformer(std::uint64_t seed = 1);

}  // namespace leadsman::testing
