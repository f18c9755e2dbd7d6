// Saves a bundle; GRAPH_FORMAT.md describes its files.
#include <cerrno>
#include <filesystem>
#include <system_error>

#include <sys/stat.h>
#include <unistd.h>

#include "leadsman/bundle.h"
#include "leadsman/error.h"
#include "leadsman/tensor_file.h"
#include "loaders/atomic_file.h"
#include "loaders/bundle_files.h"
#include "loaders/mapped_file.h"
#include "loaders/text.h"

namespace leadsman {
namespace {

using loaders::BundleFiles;
using loaders::in_quotes;
namespace fs = std::filesystem;

// What load_bundle would refuse is not written.
void check_bundle(const Bundle& bundle, const std::string& path) {
  try {
    Graph graph = bundle.graph;
    check_graph(graph);
    if (bundle.preprocess) check_preprocess(*bundle.preprocess);
  } catch (const GraphError& error) {
    throw_usage(path + ": the graph is not valid: " + error.path() + ": " + error.what());
  } catch (const Error& error) {
    throw_usage(path + ": the preprocessing is not valid: " + error.what());
  }
  for (const Layer& layer : bundle.graph.layers) {
    for (const auto& [role, tensor] : layer.weights) {
      if (bundle.weights.find(tensor) != bundle.weights.end()) continue;
      throw_usage(path + ": the weights lack " + in_quotes(tensor) + ", '" + role + "' of layer " +
                  in_quotes(layer.name));
    }
  }
}

std::string labels_text(const std::vector<std::string>& labels, const std::string& path) {
  std::string text;
  for (const std::string& label : labels) text += label + "\n";
  try {
    if (parse_labels(text, path) == labels) return text;
  } catch (const Error& error) {
    throw_usage(error.what());
  }
  throw_usage(path + ": a label is blank or holds the end of a line");
}

NamedTensors weight_list(const Bundle& bundle) {
  return {bundle.weights.begin(), bundle.weights.end()};
}

// graph.json last: it is what makes the folder a bundle.
void write_files(const Bundle& bundle, const std::string& labels, const std::string& folder) {
  const BundleFiles files(folder);
  write_tensors(files.weights, weight_list(bundle));
  if (!labels.empty()) {
    loaders::write_text_file(files.labels, labels);
  } else if (::unlink(files.labels.c_str()) != 0 && errno != ENOENT) {
    throw_input(files.labels + ": cannot be removed: " + loaders::system_message(errno));
  }
  loaders::write_text_file(files.graph, graph_text(bundle.graph, bundle.preprocess));
}

// A folder under another name until it is whole.
class NewFolder {
 public:
  explicit NewFolder(const std::string& path)
      : path_(path), partial_(loaders::folder_of(path) + "/" + loaders::temporary_name()) {
    if (::mkdir(partial_.c_str(), 0777) != 0) {
      const int code = errno;
      if (code == ENOENT)
        throw_input(path + ": cannot be made: the folder above it does not exist");
      throw_input(path + ": cannot be made: " + loaders::system_message(code));
    }
  }
  ~NewFolder() {
    std::error_code ignored;
    if (!partial_.empty()) fs::remove_all(partial_, ignored);
  }
  NewFolder(const NewFolder&) = delete;
  NewFolder& operator=(const NewFolder&) = delete;

  const std::string& partial() const { return partial_; }
  void commit() {
    std::error_code code;
    fs::rename(partial_, path_, code);
    if (code) throw_input(path_ + ": cannot be put in place: " + code.message());
    partial_.clear();
    loaders::sync_folder(loaders::folder_of(path_));
  }

 private:
  std::string path_;
  std::string partial_;
};

void save_folder(const Bundle& bundle, const std::string& labels, const std::string& path) {
  if (!loaders::path_exists(path)) {
    NewFolder folder(path);
    write_files(bundle, labels, folder.partial());
    folder.commit();
    return;
  }
  if (!loaders::is_folder(path)) throw_input(path + ": is a file, not a folder");
  const std::string reference = BundleFiles(path).reference;
  std::error_code different;
  if (loaders::path_exists(reference) &&
      (bundle.reference_path.empty() ||
       !fs::equivalent(bundle.reference_path, reference, different))) {
    throw_usage(reference + ": belongs to another model; remove it before saving this one here");
  }
  write_files(bundle, labels, path);
}

}  // namespace

void save_bundle(const Bundle& bundle, const std::string& path) {
  std::string target = path;
  while (target.size() > 1 && target.back() == '/') target.pop_back();
  if (target.empty()) throw_usage("an empty path to save a bundle to");
  check_bundle(bundle, target);
  const std::string labels = labels_text(bundle.labels, target);
  if (!target.ends_with(".safetensors")) return save_folder(bundle, labels, target);
  Metadata metadata;
  metadata.emplace(loaders::kGraphKey, graph_text(bundle.graph, bundle.preprocess));
  if (!labels.empty()) metadata.emplace(loaders::kLabelsKey, labels);
  write_tensors(target, weight_list(bundle), metadata);
}

}  // namespace leadsman
