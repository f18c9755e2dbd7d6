// A model on disk: graph, weights, labels. loaders/GRAPH_FORMAT.md describes the files.
#pragma once

#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "leadsman/graph.h"
#include "leadsman/preprocess.h"

namespace leadsman {

struct Bundle {
  Graph graph;                      ///< checked: in topological order, attributes complete
  WeightMap weights;                ///< what the graph's layers name, nothing else
  std::vector<std::string> labels;  ///< label k names class k; empty when the bundle has none
  std::optional<Preprocess> preprocess;
  std::string path;            ///< where it was loaded from
  std::string reference_path;  ///< of reference.safetensors; empty when there is none
};

struct LoadOptions {
  /// Reads every weight once to find NaNs and infinities. Without, nothing but the pages that are
  /// used later is ever read from the disk.
  bool check_finite = true;
  int threads = 0;  ///< of that check; 0: all the CPUs that the process may use
};

/// Loads a folder or a single .safetensors file. F32 weights are borrowed from the mapped file (see
/// TensorFile::read); F16, BF16 and F64 are converted. Throws Error(kInput) with the file and the
/// place in it for everything that can be wrong short of sizes that do not meet, which
/// Plan::make finds; Error(kMemory) when there is not enough memory.
Bundle load_bundle(const std::string& path, const LoadOptions& options = {});

/// Writes a single file when `path` ends in ".safetensors", else a folder. A single file, and a
/// folder that did not exist, appear whole or not at all; in an existing folder each file is
/// replaced whole, graph.json last, and labels.txt is removed when there are no labels. All of
/// `bundle.weights` are written, as F32. reference.safetensors is not: an existing folder that
/// holds one other than `bundle.reference_path` is refused with Error(kUsage), as it would belong
/// to another model. Throws Error(kUsage) for a graph that is not valid, lacks weights or has
/// labels that cannot stand in labels.txt; Error(kInput) when the path cannot be written.
void save_bundle(const Bundle& bundle, const std::string& path);

/// What graph.json says.
struct GraphDocument {
  Graph graph;  ///< as in Bundle
  std::optional<Preprocess> preprocess;
};

/// Throws Error(kInput): "graph.json: /layers/12/inputs/0: no layer or input is called 'layr1';
/// nearest: 'layer1'". `file_name` is what messages begin with.
GraphDocument parse_graph(std::string_view text, const std::string& file_name);

/// The text of graph.json; attributes that have their default value are left out. Requires a graph
/// that check_graph accepts.
std::string graph_text(const Graph& graph, const std::optional<Preprocess>& preprocess);

/// Class names, one a line: UTF-8 without control characters, at most 1024 bytes each; line ends of
/// Windows and blank lines at the end are tolerated. Throws Error(kInput) naming the line.
std::vector<std::string> parse_labels(std::string_view text, const std::string& file_name);
std::vector<std::string> load_labels(const std::string& path);

}  // namespace leadsman
