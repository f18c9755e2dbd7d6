#include "leadsman/compare.h"

#include <algorithm>
#include <cmath>
#include <limits>
#include <map>

#include "leadsman/error.h"
#include "leadsman/runner.h"
#include "observe/reference.h"
#include "observe/single_layer.h"
#include "observe/threshold.h"

namespace leadsman {
namespace {

// Room for errors that reach a layer correlated, where its gain counts on independent ones (common
// practice, no source; the margin that is left is measured in tests/observe/compare_test.cc).
constexpr double kPropagation = 2.0;

class Comparer {
 public:
  Comparer(const Graph& graph, const WeightMap& weights, const ReferenceSource& reference,
           const CompareOptions& options)
      : graph_(graph), weights_(weights), reference_(reference), options_(options) {
    for (const GraphInput& input : graph.inputs) inputs_.push_back(need(reference, input.name));
    plan_options_.threads = options.threads;
    plan_options_.accuracy = options.accuracy;
    plan_options_.reference_kernels = options.reference_kernels;
    for (const Tensor& input : inputs_) plan_options_.input_shapes.push_back(input.shape());
    plan_ = Plan::make(graph, weights, plan_options_);
  }

  Comparison run() {
    compare_outputs();
    if (options_.mode == CompareMode::kIsolated) {
      compare_isolated();
    } else {
      compare_chained();
    }
    if (result_.layers.empty()) throw_input("the reference holds none of the graph's layers");
    for (const LayerComparison& layer : result_.layers) {
      if (layer.departs && result_.first_departure.empty()) result_.first_departure = layer.layer;
      if (layer.ratio >= result_.worst_ratio) {
        result_.worst_ratio = layer.ratio;
        result_.worst_layer = layer.layer;
      }
    }
    return std::move(result_);
  }

 private:
  void compare_outputs() {
    Runner runner(plan_);
    runner.run(inputs_);
    for (std::size_t i = 0; i < graph_.outputs.size(); ++i) {
      const std::optional<Tensor> expected = reference_(graph_.outputs[i]);
      if (!expected || !(expected->shape() == runner.output(i).shape)) continue;
      const double error = measure_difference(to_tensor(runner.output(i)), *expected).relative_l2;
      // NaN must win.
      if (!(error <= result_.output_relative_l2)) result_.output_relative_l2 = error;
    }
  }

  void compare_isolated() {
    for (std::size_t i = 0; i < plan_->layers().size(); ++i) {
      report_progress(i);
      const Layer& layer = layer_at(i);
      const std::optional<Tensor> expected = reference_(layer.name);
      std::vector<Tensor> inputs;
      if (!expected || !gather_inputs(layer, inputs)) {
        result_.missing.push_back(layer.name);
        continue;
      }
      const Tensor ours = run_layer(layer, weights_, inputs, plan_options_);
      add(i, ours, *expected, inputs, /*inherited=*/0.0);
    }
    report_progress(plan_->layers().size());
  }

  // Every layer is observed, so each is a step of its own and its output is there to be seen.
  void compare_chained() {
    PlanOptions observing = plan_options_;
    observing.observe = {"*"};
    Runner runner(Plan::make(graph_, weights_, observing));
    std::map<std::string_view, std::size_t> index;
    for (std::size_t i = 0; i < plan_->layers().size(); ++i) index[plan_->layers()[i].name] = i;
    runner.add_hook("*", [&](const HookedOutput& hooked) {
      const std::size_t i = index.at(hooked.layer());
      report_progress(i);
      const Layer& layer = layer_at(i);
      const std::optional<Tensor> expected = reference_(layer.name);
      std::vector<Tensor> inputs;
      if (!expected || !gather_inputs(layer, inputs)) {
        result_.missing.push_back(layer.name);
        return;
      }
      double inherited = 0.0;
      for (const std::string& input : layer.inputs) {
        inherited = std::hypot(inherited, excused_[input]);
      }
      add(i, hooked.read(), *expected, inputs, inherited);
    });
    runner.run(inputs_);
    report_progress(plan_->layers().size());
  }

  void add(std::size_t i, const Tensor& ours, const Tensor& expected,
           std::span<const Tensor> inputs, double inherited) {
    const Layer& layer = layer_at(i);
    LayerComparison row;
    if (ours.shape() == expected.shape()) {
      row = measure_difference(ours, expected);
      const RoundingModel model =
          rounding_model(layer, weights_, plan_->layers()[i], inputs, expected, options_.threads);
      row.threshold = model.own + kPropagation * model.gain * inherited;
      row.ratio = row.relative_l2 / row.threshold;
      if (!std::isfinite(row.relative_l2)) row.remark = "not finite";
    } else {
      row.remark =
          "shape " + ours.shape().to_string() + " instead of " + expected.shape().to_string();
      row.ratio = std::numeric_limits<double>::infinity();
    }
    if (!std::isfinite(row.ratio)) row.ratio = std::numeric_limits<double>::infinity();
    row.layer = layer.name;
    row.operator_name = layer.operator_name;
    const StepSummary& step = plan_->steps()[plan_->layers()[i].step];
    if (step.layers.front() == layer.name) row.kernel = step.strategy;
    row.departs = row.ratio > 1.0;
    // What a layer brought in by rounding is passed on as it was measured, since bounds multiplied
    // over a hundred layers would allow anything; a departure excuses nobody after it.
    excused_[layer.name] = row.departs ? row.threshold : row.relative_l2;
    result_.layers.push_back(std::move(row));
  }

  bool gather_inputs(const Layer& layer, std::vector<Tensor>& inputs) const {
    for (const std::string& name : layer.inputs) {
      std::optional<Tensor> input = reference_(name);
      if (!input) return false;
      inputs.push_back(*std::move(input));
    }
    return true;
  }

  // The plan's layers are sorted; the caller's graph may not be.
  const Layer& layer_at(std::size_t i) const { return *graph_.find_layer(plan_->layers()[i].name); }

  void report_progress(std::size_t done) const {
    if (options_.progress) options_.progress(done, plan_->layers().size());
  }

  const Graph& graph_;
  const WeightMap& weights_;
  const ReferenceSource& reference_;
  const CompareOptions& options_;
  PlanOptions plan_options_;
  std::vector<Tensor> inputs_;
  std::shared_ptr<const Plan> plan_;
  std::map<std::string, double> excused_;  // relative error that a layer's readers may inherit
  Comparison result_;
};

}  // namespace

LayerComparison measure_difference(const Tensor& ours, const Tensor& reference) {
  double error = 0.0;
  double square_ours = 0.0;
  double square_reference = 0.0;
  double product = 0.0;
  double largest = 0.0;
  for (std::int64_t i = 0; i < reference.elements(); ++i) {
    const double a = static_cast<double>(ours.data()[i]);
    const double b = static_cast<double>(reference.data()[i]);
    error += (a - b) * (a - b);
    square_ours += a * a;
    square_reference += b * b;
    product += a * b;
    largest = std::max(largest, std::abs(a - b));
  }
  const double count = std::max(1.0, static_cast<double>(reference.elements()));
  const double norm = square_reference > 0.0 ? std::sqrt(square_reference) : 1.0;
  LayerComparison row;
  row.relative_l2 = std::sqrt(error) / norm;
  row.max_over_rms = largest / (norm / std::sqrt(count));
  const double lengths = std::sqrt(square_ours) * std::sqrt(square_reference);
  row.cosine = lengths > 0.0 ? product / lengths : (error == 0.0 ? 1.0 : 0.0);
  return row;
}

Comparison compare(const Graph& graph, const WeightMap& weights, const ReferenceSource& reference,
                   const CompareOptions& options) {
  // Attributes completed, as the thresholds read them.
  Graph checked = graph;
  try {
    check_graph(checked);
  } catch (const GraphError& error) {
    throw_input("graph: " + error.path() + ": " + error.what());
  }
  return Comparer(checked, weights, reference, options).run();
}

}  // namespace leadsman
