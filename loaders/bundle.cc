// Loads a bundle; GRAPH_FORMAT.md describes its files.
#include "leadsman/bundle.h"

#include <new>
#include <optional>
#include <utility>

#include "core/threads.h"
#include "leadsman/error.h"
#include "leadsman/tensor_file.h"
#include "loaders/bundle_files.h"
#include "loaders/element_type.h"
#include "loaders/finite.h"
#include "loaders/mapped_file.h"
#include "loaders/text.h"

namespace leadsman {
namespace {

using loaders::in_quotes;

// Whose weight a tensor is, for messages: "layer 'conv1' names it as its 'weight'".
struct Use {
  std::string layer;
  std::string role;
};

[[noreturn]] void fail_weight(const TensorFile& file, const std::string& tensor, const Use& use,
                              const std::string& message) {
  throw_input(file.path() + ": tensor " + in_quotes(tensor) + ", '" + use.role + "' of layer " +
              in_quotes(use.layer) + ": " + message);
}

void check_info(const TensorFile& file, const std::string& tensor, const Use& use) {
  if (!file.has(tensor)) {
    throw_input(file.path() + ": no tensor is called " + in_quotes(tensor) + ", which is '" +
                use.role + "' of layer " + in_quotes(use.layer) +
                loaders::nearest_hint(tensor, file.names()));
  }
  const TensorInfo& info = file.info(tensor);
  if (!is_floating(info.type)) {
    fail_weight(
        file, tensor, use,
        "is " + std::string(element_type_name(info.type)) + "; weights are F32, F16, BF16 or F64");
  }
  if (info.shape.size() > Shape::kMaxRank) {
    fail_weight(file, tensor, use,
                "has " + std::to_string(info.shape.size()) + " sizes, at most " +
                    std::to_string(Shape::kMaxRank) + " can be used");
  }
  if (loaders::array_bytes(info) == 0) {
    fail_weight(file, tensor, use, "is empty: its shape is " + loaders::shape_text(info.shape));
  }
}

WeightMap load_weights(const TensorFile& file, const std::map<std::string, Use, std::less<>>& uses,
                       const LoadOptions& options) {
  for (const auto& [tensor, use] : uses) check_info(file, tensor, use);
  WeightMap weights;
  for (const auto& [tensor, use] : uses) weights.emplace(tensor, file.read(tensor));
  if (!options.check_finite) return weights;
  std::vector<const Tensor*> tensors;
  for (const auto& [name, tensor] : weights) tensors.push_back(&tensor);
  const int threads = options.threads > 0 ? options.threads : available_cpus();
  const loaders::NonFinite found = loaders::find_non_finite(tensors, threads);
  if (found.index < 0) return weights;
  const auto use = std::next(uses.begin(), static_cast<std::ptrdiff_t>(found.tensor));
  fail_weight(file, use->first, use->second,
              loaders::non_finite_text(*tensors[found.tensor], found.index));
}

std::map<std::string, Use, std::less<>> weight_uses(const Graph& graph) {
  std::map<std::string, Use, std::less<>> uses;
  for (const Layer& layer : graph.layers) {
    for (const auto& [role, tensor] : layer.weights) uses.emplace(tensor, Use{layer.name, role});
  }
  return uses;
}

Bundle load_folder(const std::string& path, const LoadOptions& options) {
  const loaders::BundleFiles files(path);
  if (!loaders::path_exists(files.graph)) {
    throw_input(path + ": is a folder without " + loaders::BundleFiles::kGraph);
  }
  Bundle bundle;
  GraphDocument document =
      parse_graph(loaders::read_text_file(files.graph, loaders::kMaxGraphBytes), files.graph);
  bundle.graph = std::move(document.graph);
  bundle.preprocess = std::move(document.preprocess);
  const auto uses = weight_uses(bundle.graph);
  if (!uses.empty()) bundle.weights = load_weights(TensorFile::open(files.weights), uses, options);
  if (loaders::path_exists(files.labels)) bundle.labels = load_labels(files.labels);
  if (loaders::path_exists(files.reference)) bundle.reference_path = files.reference;
  return bundle;
}

Bundle load_single_file(const std::string& path, const LoadOptions& options) {
  if (path.ends_with(".json")) {
    throw_input(path + ": is a graph alone; a bundle is the folder that holds it");
  }
  const TensorFile file = TensorFile::open(path);
  const auto graph = file.metadata().find(loaders::kGraphKey);
  if (graph == file.metadata().end()) {
    throw_input(path + ": holds tensors but no graph (no 'leadsman_graph' in its __metadata__)");
  }
  const auto place = [&path](std::string_view key) {
    return path + ": __metadata__/" + std::string(key);
  };
  Bundle bundle;
  GraphDocument document = parse_graph(graph->second, place(loaders::kGraphKey));
  bundle.graph = std::move(document.graph);
  bundle.preprocess = std::move(document.preprocess);
  bundle.weights = load_weights(file, weight_uses(bundle.graph), options);
  const auto labels = file.metadata().find(loaders::kLabelsKey);
  if (labels != file.metadata().end()) {
    bundle.labels = parse_labels(labels->second, place(loaders::kLabelsKey));
  }
  return bundle;
}

}  // namespace

Bundle load_bundle(const std::string& path, const LoadOptions& options) {
  try {
    Bundle bundle = loaders::path_exists(path) && loaders::is_folder(path)
                        ? load_folder(path, options)
                        : load_single_file(path, options);
    bundle.path = path;
    return bundle;
  } catch (const std::bad_alloc&) {
    throw Error(ErrorKind::kMemory, path + ": not enough memory to load it");
  }
}

}  // namespace leadsman
