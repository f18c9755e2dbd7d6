// Our activations against those another library computed, layer by layer.
#pragma once

#include <functional>
#include <optional>
#include <string>
#include <vector>

#include "leadsman/plan.h"

namespace leadsman {

/// The reference's tensor of a graph input or layer, or nothing when it has none.
using ReferenceSource = std::function<std::optional<Tensor>(const std::string& name)>;

enum class CompareMode {
  /// Each layer gets the reference's own inputs, so an error belongs to that layer alone.
  kIsolated,
  /// Our activations flow on from layer to layer. Each layer is allowed its own rounding and what
  /// the errors measured at its inputs become on their way through; behind a departure, only what
  /// that layer was allowed.
  kChained,
};

struct CompareOptions {
  CompareMode mode = CompareMode::kIsolated;
  int threads = 0;  ///< this and the next two as in PlanOptions
  Accuracy accuracy = Accuracy::kFast;
  bool reference_kernels = false;
  /// Called before each layer with (done, total).
  std::function<void(std::size_t, std::size_t)> progress;
};

struct LayerComparison {
  std::string layer;
  std::string operator_name;
  std::string kernel;         ///< "winograd4"; empty where it is not the first layer of a step
  double relative_l2 = 0.0;   ///< ||ours - reference|| / ||reference||
  double max_over_rms = 0.0;  ///< largest |ours - reference| / root mean square of the reference
  double cosine = 1.0;        ///< of the angle between the two
  double threshold = 0.0;     ///< on relative_l2: what rounding explains (observe/threshold.h)
  double ratio = 0.0;         ///< relative_l2 / threshold; infinite when values are not finite
  bool departs = false;       ///< ratio > 1
  std::string remark;         ///< "shape [1, 64] instead of [1, 32]", "not finite"; mostly empty
};

struct Comparison {
  std::vector<LayerComparison> layers;  ///< in execution order
  std::vector<std::string> missing;     ///< layers that the reference does not hold
  std::string first_departure;          ///< empty: none
  double worst_ratio = 0.0;
  std::string worst_layer;
  /// The graph's outputs from one whole, fused run: relative L2 error of the worst of them.
  double output_relative_l2 = 0.0;
};

/// Throws Error(kInput) when the reference holds no input or none of the layers, and whatever
/// planning throws. Not to be confused with a test on labels: it says whether this machine
/// computed what the reference did.
Comparison compare(const Graph& graph, const WeightMap& weights, const ReferenceSource& reference,
                   const CompareOptions& options = {});

/// relative_l2, max_over_rms and cosine of `ours` against `reference` (of one shape), summed in
/// double. A reference of all zeros counts as having norm 1.
LayerComparison measure_difference(const Tensor& ours, const Tensor& reference);

}  // namespace leadsman
