// Writes an architecture's graph layer by layer, with the shape of every weight.
//
// Every function adds one layer and gives its name, to be handed to the next. Tensors are named as
// PyTorch names a module's: the layer's name, a dot and "weight", "bias", "running_mean" or
// "running_var".
//
// The writer follows the mean square ("power") of what flows, as it is at the start of training:
// weights are spread so that a layer's output has power 1 whatever comes in. For ReLU, which halves
// the power, that is the rule of He et al. 2015; the same argument serves the other activations,
// and sums of branches.
#pragma once

#include <map>
#include <string>
#include <utility>
#include <vector>

#include "leadsman/architectures.h"

namespace leadsman::loaders {

struct Convolution {
  std::int64_t kernel = 1;
  std::int64_t stride = 1;
  std::int64_t padding = 0;
  std::int64_t groups = 1;
  bool bias = false;
  double gain = 1.0;  ///< of the seeded weights: the output's power is its square
};

class GraphWriter {
 public:
  using AttributeList = std::vector<std::pair<std::string, AttributeValue>>;

  /// With the input "image".
  GraphWriter(std::string name, const ArchitectureOptions& options);

  const ArchitectureOptions& options() const { return options_; }
  std::int64_t channels(const std::string& layer) const { return flows_.at(layer).channels; }

  std::string conv(const std::string& name, const std::string& input, std::int64_t out,
                   const Convolution& convolution);
  /// `joint` stands between the layer's name and "weight" or "bias".
  std::string linear(const std::string& name, const std::string& input, std::int64_t out,
                     const std::string& joint = ".");
  /// `gain`: the mean of the seeded gains.
  std::string batch_norm(const std::string& name, const std::string& input, double gain = 1.0);
  /// `tensors` stands in the names of its weights for the layer's name.
  std::string layer_norm(const std::string& name, const std::string& input, double eps,
                         const std::string& tensors);
  /// `kind`: relu, relu6, silu, gelu or sigmoid.
  std::string activation(const std::string& name, const std::string& input,
                         const std::string& kind);
  std::string add(const std::string& name, const std::string& first, const std::string& second);
  /// An image times a factor a channel.
  std::string mul(const std::string& name, const std::string& image, const std::string& factors);
  /// A learned factor a channel, the weight `tensor`.
  std::string scale(const std::string& name, const std::string& input, const std::string& tensor,
                    const ArchitectureWeight& factors);
  /// Adaptive pooling to 1x1.
  std::string global_pool(const std::string& name, const std::string& input);
  /// Any other layer; channels and power are those of the first input.
  std::string layer(const std::string& name, const std::string& op, std::vector<std::string> inputs,
                    const AttributeList& attributes = {});

  /// A weight of the layer added last, under the name that the checkpoint has for it.
  void weight(const std::string& role, const std::string& tensor, const ArchitectureWeight& weight);
  void set_channels(const std::string& layer, std::int64_t channels) {
    flows_.at(layer).channels = channels;
  }

  /// The graph and its weights; nothing else of the Architecture is filled in.
  Architecture finish(const std::string& output);

 private:
  struct Flow {
    std::int64_t channels = 0;
    double power = 1.0;
    double positive = 0.0;  ///< the part of the power that is of values above 0 by construction
  };

  ArchitectureOptions options_;
  Architecture architecture_;
  std::map<std::string, Flow, std::less<>> flows_;
};

}  // namespace leadsman::loaders
