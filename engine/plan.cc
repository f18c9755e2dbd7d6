#include "leadsman/plan.h"

#include "core/threads.h"
#include "engine/plan_state.h"
#include "leadsman/error.h"

namespace leadsman {
namespace {

StepSummary summarize(const internal::PlanState& plan, const internal::Step& step) {
  return {.layers = step.layers,
          .operator_name = std::string(step.op->contract().name),
          .strategy = step.strategy,
          .refusals = step.refusals,
          .output = plan.values[step.output].shape,
          .macs = step.macs};
}

void summarize_steps(internal::PlanState& plan) {
  std::map<std::string_view, std::size_t> step_of;
  for (const internal::Step& step : plan.steps) {
    for (const std::string& layer : step.layers) step_of[layer] = plan.step_summaries.size();
    plan.step_summaries.push_back(summarize(plan, step));
  }
  for (LayerSummary& layer : plan.layers) {
    layer.step = step_of.at(layer.name);
    const internal::Step& step = plan.steps[layer.step];
    // What a step took in behind its first layer is done to each finished sum.
    if (layer.name == step.layers.front()) layer.rounding_growth = step.rounding_growth;
  }
}

// Free sizes of one input: the batch, then height and width (of images) or the tokens' number.
Shape input_shape_at(const GraphInput& input, std::int64_t n, std::int64_t height,
                     std::int64_t width) {
  std::vector<std::int64_t> sizes = input.shape;
  const std::vector<std::int64_t>& usual = input.usual_size;
  const std::size_t spatial = sizes.size() - 2;
  for (std::size_t axis = 0; axis < sizes.size(); ++axis) {
    if (sizes[axis] != GraphInput::kFree) continue;
    if (axis == 0) {
      sizes[axis] = n;
      continue;
    }
    const bool is_width = sizes.size() == 4 && axis == 3;
    const std::int64_t given = is_width ? width : height;
    const std::size_t place = is_width ? 1 : 0;
    if (given == 0 && usual.size() != spatial) {
      throw_usage("input '" + input.name + "': the graph does not say its usual size; give one");
    }
    sizes[axis] = given == 0 ? usual[place] : given;
  }
  return Shape(sizes);
}

}  // namespace

std::vector<Shape> input_shapes_at(const Graph& graph, std::int64_t n, std::int64_t height,
                                   std::int64_t width) {
  std::vector<Shape> shapes;
  for (const GraphInput& input : graph.inputs) {
    shapes.push_back(input_shape_at(input, n, height, width));
  }
  return shapes;
}

std::shared_ptr<const Plan> Plan::make(const Graph& graph, const WeightMap& weights,
                                       const PlanOptions& options) {
  auto plan = std::make_unique<internal::PlanState>();
  plan->graph = graph;
  plan->options = options;
  try {
    check_graph(plan->graph);
  } catch (const GraphError& error) {
    throw_input("graph: " + error.path() + ": " + error.what());
  }
  if (options.threads < 0 || options.threads > 1024) {
    throw_usage("threads: " + std::to_string(options.threads) + " is not between 0 and 1024");
  }
  if (options.threads == 0) plan->options.threads = available_cpus();
  plan->input_shapes =
      options.input_shapes.empty() ? input_shapes_at(graph, 1, 0, 0) : options.input_shapes;
  if (plan->input_shapes.size() != graph.inputs.size()) {
    throw_usage("the graph has " + std::to_string(graph.inputs.size()) + " inputs, not " +
                std::to_string(plan->input_shapes.size()));
  }
  internal::infer_shapes(*plan, weights);
  internal::mark_observed(*plan);
  if (!options.reference_kernels) internal::fuse_steps(*plan);
  internal::select_kernels(*plan);
  internal::lay_memory(*plan);
  summarize_steps(*plan);
  return std::make_shared<const Plan>(std::move(plan));
}

Plan::Plan(std::unique_ptr<const internal::PlanState> state) : state_(std::move(state)) {}
Plan::~Plan() = default;

const std::vector<LayerSummary>& Plan::layers() const {
  return state_->layers;
}
const std::vector<StepSummary>& Plan::steps() const {
  return state_->step_summaries;
}
const std::vector<std::string>& Plan::input_names() const {
  return state_->input_names;
}
const std::vector<Shape>& Plan::input_shapes() const {
  return state_->input_shapes;
}
const std::vector<std::string>& Plan::output_names() const {
  return state_->graph.outputs;
}
std::int64_t Plan::parameters() const {
  return state_->parameters;
}
int Plan::threads() const {
  return state_->options.threads;
}
std::size_t Plan::arena_bytes() const {
  return state_->arena_bytes;
}
std::size_t Plan::workspace_bytes() const {
  return state_->workspace_bytes;
}
std::size_t Plan::weight_bytes() const {
  return state_->weight_bytes;
}
std::size_t Plan::packed_bytes() const {
  return state_->packed_bytes;
}

std::int64_t Plan::macs() const {
  std::int64_t total = 0;
  for (const LayerSummary& layer : layers()) total += layer.macs;
  return total;
}

std::size_t Plan::peak_bytes() const {
  return arena_bytes() + workspace_bytes() + weight_bytes() + packed_bytes();
}

std::vector<std::string> Plan::observable() const {
  std::vector<std::string> names;
  for (const internal::Step& step : state_->steps) {
    // A view that is not observed has no memory of its own to overwrite.
    if (!step.is_view) names.push_back(step.layers.back());
  }
  return names;
}

}  // namespace leadsman
