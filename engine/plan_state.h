// What the planner's passes work on and what the runner obeys.
#pragma once

#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "leadsman/plan.h"
#include "ops/channel_affine.h"
#include "ops/operator.h"

namespace leadsman::internal {

using ValueId = std::size_t;

/// A tensor that flows: a graph input, or what a layer gives.
struct Value {
  std::string name;
  Shape shape;
  bool observed = false;   ///< a hook will ask for it
  bool is_output = false;  ///< of the graph
  /// The value whose memory this one uses: itself, or another (views, in-place steps).
  ValueId storage = 0;
  std::size_t offset_bytes = 0;  ///< in the arena, of the storage value
};

struct Step {
  std::vector<std::string> layers;  ///< covered layers in graph order
  const ops::Operator* op = nullptr;
  ops::OpContext context;  ///< of the first layer; emptied of weights once the kernel is made
  std::vector<ValueId> inputs;
  ValueId output = 0;
  std::optional<ValueId> residual;
  ops::Epilogue epilogue;
  std::optional<ops::ChannelAffine> affine;  ///< of the sums: to be folded into the weights
  std::string strategy;
  double rounding_growth = 1.0;  ///< of the strategy
  std::vector<std::string> refusals;
  std::int64_t macs = 0;
  bool is_view = false;                 ///< nothing to run: the output is the input's memory
  std::unique_ptr<ops::Kernel> kernel;  ///< null iff is_view
};

struct PlanState {
  Graph graph;
  PlanOptions options;        ///< threads resolved
  std::vector<Value> values;  ///< graph inputs first, then one for each layer
  std::vector<Step> steps;    ///< in execution order
  std::vector<LayerSummary> layers;
  std::vector<StepSummary> step_summaries;
  std::vector<std::string> input_names;
  std::vector<Shape> input_shapes;
  std::vector<ValueId> outputs;
  std::int64_t parameters = 0;
  std::size_t arena_bytes = 0;
  std::size_t workspace_bytes = 0;
  std::size_t weight_bytes = 0;
  std::size_t packed_bytes = 0;
};

/// pass_shapes.cc: one step and one value for each layer, with shapes, costs and weights.
void infer_shapes(PlanState& plan, const WeightMap& weights);
/// pass_observe.cc: marks what hooks will ask for; adds the steps that compute attention weights.
void mark_observed(PlanState& plan);
/// pass_fuse.cc: batch-norm into weights, residual and activation into the epilogue, views into
/// their producer. Never across an observed value.
void fuse_steps(PlanState& plan);
/// pass_select.cc: a kernel for each step.
void select_kernels(PlanState& plan);
/// pass_memory.cc: lifetimes to arena offsets.
void lay_memory(PlanState& plan);

}  // namespace leadsman::internal
