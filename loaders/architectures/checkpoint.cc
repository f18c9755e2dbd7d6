// A checkpoint becomes a bundle: its tensors, matched with what the architecture needs.
#include <algorithm>
#include <cmath>
#include <new>
#include <optional>

#include "core/threads.h"
#include "leadsman/architectures.h"
#include "leadsman/error.h"
#include "leadsman/names.h"
#include "leadsman/tensor_file.h"
#include "loaders/architectures/families.h"
#include "loaders/element_type.h"
#include "loaders/finite.h"
#include "loaders/text.h"

namespace leadsman {
namespace {

using loaders::in_quotes;

/// A checkpoint under the names that architectures use.
struct Checkpoint {
  TensorFile file;
  std::map<std::string, std::string, std::less<>> stored;  ///< name in use -> name in the file

  /// The sizes of a tensor; nullptr when there is none of that name.
  const std::vector<std::int64_t>* shape(std::string_view name) const {
    const auto found = stored.find(name);
    return found == stored.end() ? nullptr : &file.info(found->second).shape;
  }
};

void replace_first(std::string& text, std::string_view from, std::string_view to) {
  const std::size_t at = text.find(from);
  if (at != std::string::npos) text.replace(at, from.size(), to);
}

std::string name_in_use(std::string name) {
  constexpr std::string_view kParallel = "module.";
  if (name.starts_with(kParallel)) name.erase(0, kParallel.size());
  replace_first(name, ".mlp.linear_1.", ".mlp.0.");
  replace_first(name, ".mlp.linear_2.", ".mlp.3.");
  return name;
}

TensorFile open_checkpoint(const std::string& path) {
  try {
    return TensorFile::open(path);
  } catch (const Error& error) {
    const bool pickle = path.ends_with(".pth") || path.ends_with(".pt");
    if (error.kind() != ErrorKind::kInput || !pickle) throw;
    throw_input(std::string(error.what()) +
                "\n(.pth and .pt files are pickles, which Python alone reads: save their tensors "
                "as .safetensors)");
  }
}

Checkpoint read_names(const std::string& path) {
  Checkpoint checkpoint{open_checkpoint(path), {}};
  for (const std::string& name : checkpoint.file.names()) {
    const auto [place, added] = checkpoint.stored.emplace(name_in_use(name), name);
    if (!added) {
      throw_input(path + ": " + in_quotes(place->second) + " and " + in_quotes(name) +
                  " are names for one tensor, " + in_quotes(place->first));
    }
  }
  return checkpoint;
}

/// The side of the images for which a checkpoint of that many positions was trained; nullopt when
/// they form no square.
std::optional<std::int64_t> side_for_positions(std::int64_t positions, std::int64_t patch) {
  constexpr std::int64_t kLargestSide = 32768;
  const auto side =
      std::llround(std::sqrt(static_cast<double>(std::max<std::int64_t>(positions, 0))));
  if (side < 1 || side > kLargestSide / patch || side * side != positions) return std::nullopt;
  return side * patch;
}

/// What the shapes of a checkpoint say about its architecture. What does not fit is left at its
/// default, for the comparison to find.
ArchitectureOptions options_of(const Checkpoint& checkpoint, const Graph& graph) {
  ArchitectureOptions options;
  const Layer& last = *graph.find_layer(graph.outputs.front());
  const auto* head = checkpoint.shape(last.weights.at("weight"));
  if (head != nullptr && head->size() == 2 && head->front() > 0 &&
      head->front() <= loaders::kMostClasses) {
    options.classes = head->front();
  }
  for (const Layer& layer : graph.layers) {
    if (layer.operator_name != "position_embed") continue;
    const auto* positions = checkpoint.shape(layer.weights.at("weight"));
    if (positions == nullptr || positions->size() != 3) continue;
    const std::int64_t patch =
        graph.find_layer(layer.inputs[1])->attributes.integers("stride").front();
    const std::int64_t prefix = layer.attributes.integer("prefix_tokens");
    if (const auto side = side_for_positions((*positions)[1] - prefix, patch)) {
      options.size = {*side, *side};
    }
  }
  return options;
}

bool matches_any(const std::vector<std::string>& patterns, const std::string& name,
                 const std::string& stored) {
  return std::ranges::any_of(patterns, [&](const std::string& pattern) {
    return matches_glob(pattern, name) || matches_glob(pattern, stored);
  });
}

/// Everything that keeps a checkpoint from being the weights of an architecture.
class Faults {
 public:
  Faults(const Architecture& architecture, const Checkpoint& checkpoint,
         const std::vector<std::string>& ignore) {
    for (const auto& [name, stored] : checkpoint.stored) {
      if (architecture.weights.contains(name) || name.ends_with("num_batches_tracked")) continue;
      if (!matches_any(ignore, name, stored)) unknown_.push_back(stored);
    }
    for (const auto& [name, weight] : architecture.weights) {
      const auto found = checkpoint.stored.find(name);
      if (found == checkpoint.stored.end()) {
        missing_.push_back(name);
      } else {
        check(weight, found->second, checkpoint.file.info(found->second));
      }
    }
  }

  bool none() const { return missing_.empty() && wrong_.empty() && unknown_.empty(); }

  /// The first few of each kind, a line each.
  std::string text() const {
    constexpr std::size_t kShown = 3;
    std::string text;
    std::size_t left = 0;
    const auto add = [&](const std::vector<std::string>& items, const auto& line) {
      for (std::size_t i = 0; i < items.size() && i < kShown; ++i) text += "\n  " + line(items[i]);
      left += items.size() - std::min(items.size(), kShown);
    };
    add(missing_, [&](const std::string& name) {
      return "missing: " + in_quotes(name) + loaders::nearest_hint(name, unknown_);
    });
    add(wrong_, [](const std::string& line) { return line; });
    add(unknown_, [&](const std::string& name) {
      return "not known: " + in_quotes(name) + loaders::nearest_hint(name, missing_);
    });
    return left == 0 ? text : text + "\n  and " + std::to_string(left) + " more";
  }

 private:
  void check(const ArchitectureWeight& weight, const std::string& stored, const TensorInfo& info) {
    if (!std::ranges::equal(info.shape, weight.shape.sizes())) {
      wrong_.push_back("shape: " + in_quotes(stored) + " is " + loaders::shape_text(info.shape) +
                       ", expected " + weight.shape.to_string());
    } else if (!is_floating(info.type)) {
      wrong_.push_back("type: " + in_quotes(stored) + " is " +
                       std::string(element_type_name(info.type)) +
                       ", expected F32, F16, BF16 or F64");
    }
  }

  std::vector<std::string> missing_;
  std::vector<std::string> wrong_;
  std::vector<std::string> unknown_;
};

Architecture architecture_for(std::string_view name, const Checkpoint& checkpoint,
                              const std::optional<std::int64_t>& classes) {
  const Architecture usual = loaders::write_architecture(name, {});
  ArchitectureOptions options = options_of(checkpoint, usual.graph);
  if (classes) options.classes = *classes;
  return loaders::write_architecture(name, options);
}

/// "\n(they are those of resnet18 for 1000 classes)"; "" when no architecture fits.
std::string fitting_architecture(const Checkpoint& checkpoint,
                                 const std::vector<std::string>& ignore) {
  for (const std::string& name : architecture_names()) {
    const Architecture other = architecture_for(name, checkpoint, std::nullopt);
    if (!Faults(other, checkpoint, ignore).none()) continue;
    const std::string& head =
        other.graph.find_layer(other.graph.outputs.front())->weights.at("weight");
    return "\n(they are those of " + name + " for " +
           std::to_string(other.weights.at(head).shape[0]) + " classes)";
  }
  return "";
}

void require_finite(const WeightMap& weights, const Checkpoint& checkpoint, int threads) {
  std::vector<const Tensor*> tensors;
  for (const auto& [name, tensor] : weights) tensors.push_back(&tensor);
  const loaders::NonFinite found =
      loaders::find_non_finite(tensors, threads > 0 ? threads : available_cpus());
  if (found.index < 0) return;
  const std::string& name =
      std::next(weights.begin(), static_cast<std::ptrdiff_t>(found.tensor))->first;
  throw_input(checkpoint.file.path() + ": tensor " + in_quotes(checkpoint.stored.at(name)) + ": " +
              loaders::non_finite_text(*tensors[found.tensor], found.index));
}

void check_patterns(const std::vector<std::string>& ignore, const Architecture& architecture,
                    const Checkpoint& checkpoint) {
  for (const std::string& pattern : ignore) {
    const bool used = std::ranges::any_of(checkpoint.stored, [&](const auto& names) {
      return !architecture.weights.contains(names.first) &&
             matches_any({pattern}, names.first, names.second);
    });
    if (used) continue;
    throw_usage(checkpoint.file.path() + ": " + in_quotes(pattern) + " matches no tensor that " +
                architecture.graph.name + " does without");
  }
}

}  // namespace

Bundle import_checkpoint(std::string_view name, const std::string& path,
                         const ImportOptions& options) {
  loaders::write_architecture(name, {});  // an unknown name is said before the file is read
  const Checkpoint checkpoint = read_names(path);
  Architecture architecture = architecture_for(name, checkpoint, options.classes);
  const Faults faults(architecture, checkpoint, options.ignore);
  if (!faults.none()) {
    throw_input(path + ": these are not the weights of " + std::string(name) + ":" + faults.text() +
                fitting_architecture(checkpoint, options.ignore));
  }
  check_patterns(options.ignore, architecture, checkpoint);
  const std::vector<std::int64_t>& trained = architecture.graph.inputs.front().usual_size;
  loaders::set_size(architecture, options.size.value_or(PictureSize{trained[0], trained[1]}));
  try {
    WeightMap weights;
    for (const auto& [tensor, weight] : architecture.weights) {
      weights.emplace(tensor, checkpoint.file.read(checkpoint.stored.at(tensor)));
    }
    require_finite(weights, checkpoint, options.threads);
    return {.graph = std::move(architecture.graph),
            .weights = std::move(weights),
            .labels = {},
            .preprocess = std::move(architecture.preprocess),
            .path = {},
            .reference_path = {}};
  } catch (const std::bad_alloc&) {
    throw Error(ErrorKind::kMemory, path + ": not enough memory to load it");
  }
}

}  // namespace leadsman
