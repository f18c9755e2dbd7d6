// A graph specialised to input shapes, a thread count and a set of observed layers.
//
// Planning decides everything: shapes, fusion, which kernel runs each step, where each activation
// lies in the arena. A Plan is immutable; any number of Runners on any threads may share one.
#pragma once

#include <chrono>
#include <cstddef>
#include <memory>
#include <string>
#include <vector>

#include "leadsman/graph.h"

namespace leadsman {

/// What kernels may do to the order of sums.
enum class Accuracy {
  kExact,  ///< each value is one sum of the products that the layer's formula names
  /// 3x3 convolutions may use minimal filtering (Winograd): fewer products, and up to twice the
  /// rounding error in a layer, which compare() allows for. Relative L2 error of a whole model's
  /// output against the reference kernels, kExact / kFast: ResNet-18 5.1e-7 / 4.9e-7, ResNet-50
  /// 9.3e-7 / 9.6e-7, VGG-16 2.1e-6 / 1.8e-6, DenseNet-121 1.1e-6 / 1.4e-6.
  kFast,
};

struct PlanOptions {
  /// One logical shape for each graph input. Empty: batch 1 at the graph's usual size.
  std::vector<Shape> input_shapes;
  /// 0: all the CPUs that the process may use.
  int threads = 0;
  /// How long threads may spin, from one step of a run to the next, before they sleep; between runs
  /// they always sleep. 0 saves power and costs speed: waking a thread takes tens of microseconds.
  std::chrono::microseconds spin{200};
  Accuracy accuracy = Accuracy::kFast;
  /// True: the plain reference kernels only, one step a layer, nothing fused: the oracle.
  bool reference_kernels = false;
  /// Layers (names or globs) whose outputs hooks will ask for. Fusion is cut after these layers
  /// and nowhere else. "NAME:weights" of an attention layer observes its attention weights,
  /// [N, heads, T, T]. A pattern that matches nothing is an Error(kUsage).
  std::vector<std::string> observe;
};

/// What one layer of the graph costs and gives at this plan's shapes.
struct LayerSummary {
  std::string name;
  std::string operator_name;
  Shape shape;
  std::int64_t parameters = 0;
  std::int64_t macs = 0;
  std::int64_t activation_bytes = 0;
  std::int64_t reduction = 1;  ///< length of the longest sum behind one value
  double rounding_growth = 1;  ///< of its kernel: rounding errors, in those of plain sums
  std::size_t step = 0;        ///< the step that computes it
};

/// What the runner does at once: one layer, or several fused ones.
struct StepSummary {
  std::vector<std::string> layers;  ///< in graph order; the last one's output is the step's
  std::string operator_name;
  std::string strategy;               ///< name of the chosen kernel
  std::vector<std::string> refusals;  ///< "winograd4: the stride is not 1"
  Shape output;
  std::int64_t macs = 0;
};

namespace internal {
struct PlanState;
}

class Plan {
 public:
  /// Throws Error(kInput) naming the layer when shapes do not meet or a weight is missing or has
  /// the wrong shape, Error(kUsage) for options that do not fit the graph.
  /// The plan keeps the tensors of `weights` that its kernels read in place alive.
  static std::shared_ptr<const Plan> make(const Graph& graph, const WeightMap& weights,
                                          const PlanOptions& options = {});

  const std::vector<LayerSummary>& layers() const;
  const std::vector<StepSummary>& steps() const;
  const std::vector<std::string>& input_names() const;
  const std::vector<Shape>& input_shapes() const;
  const std::vector<std::string>& output_names() const;
  /// Trained values of the graph's layers, a shared tensor counted once.
  std::int64_t parameters() const;
  std::int64_t macs() const;
  /// Names that hooks may ask for: observed layers, and layers that end a step anyway.
  std::vector<std::string> observable() const;
  int threads() const;

  std::size_t arena_bytes() const;      ///< activations, inputs and outputs of one runner
  std::size_t workspace_bytes() const;  ///< scratch of one runner
  std::size_t weight_bytes() const;     ///< weights read in place, once for all runners
  std::size_t packed_bytes() const;     ///< weights copied into the kernels' own order
  /// What one runner needs in all: the sum of the four above.
  std::size_t peak_bytes() const;

  explicit Plan(std::unique_ptr<const internal::PlanState> state);
  ~Plan();
  Plan(const Plan&) = delete;
  Plan& operator=(const Plan&) = delete;
  const internal::PlanState& state() const { return *state_; }

 private:
  std::unique_ptr<const internal::PlanState> state_;
};

/// Input shapes for batch `n` at height x width (0, 0: the usual size). Throws Error(kUsage) when
/// the graph does not say its usual size and none is given.
std::vector<Shape> input_shapes_at(const Graph& graph, std::int64_t n, std::int64_t height,
                                   std::int64_t width);

}  // namespace leadsman
