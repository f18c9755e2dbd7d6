// A model as named layers: what graph.json says, free of files and of any image size.
#pragma once

#include <map>
#include <stdexcept>
#include <string>
#include <string_view>
#include <vector>

#include "leadsman/attributes.h"
#include "leadsman/tensor.h"

namespace leadsman {

/// One node. `inputs` name graph inputs or other layers; `weights` maps the operator's roles
/// ("weight", "bias", ...) to tensor names of the checkpoint.
struct Layer {
  std::string name;
  std::string operator_name;
  std::vector<std::string> inputs;
  Attributes attributes;
  std::map<std::string, std::string, std::less<>> weights;
};

/// Sizes are logical; kFree marks those that the caller chooses (batch, height, width).
struct GraphInput {
  static constexpr std::int64_t kFree = -1;
  std::string name;
  std::vector<std::int64_t> shape;       ///< {kFree, 3, kFree, kFree}
  std::vector<std::int64_t> usual_size;  ///< {height, width} the model was trained at; may be empty
};

struct Graph {
  std::string name;
  std::vector<GraphInput> inputs;
  std::vector<Layer> layers;  ///< in topological order once check_graph has passed
  std::vector<std::string> outputs;

  /// nullptr when there is none.
  const Layer* find_layer(std::string_view layer_name) const;
};

/// Weights by tensor name of the checkpoint.
using WeightMap = std::map<std::string, Tensor, std::less<>>;

/// Where in a graph something is wrong; loaders turn it into a JSON pointer.
/// `path` is such a pointer already: "/layers/12/inputs/0".
class GraphError : public std::runtime_error {
 public:
  GraphError(std::string path, const std::string& message)
      : std::runtime_error(message), path_(std::move(path)) {}
  const std::string& path() const noexcept { return path_; }

 private:
  std::string path_;
};

/// Checks all that does not depend on image size or weights: names unique and not empty, operators
/// known, input counts, references, cycles, outputs, attributes (completed in place by their
/// defaults), weight roles. Layers may come in any order and are sorted. Throws GraphError; an
/// unknown name comes with its nearest neighbour.
void check_graph(Graph& graph);

}  // namespace leadsman
