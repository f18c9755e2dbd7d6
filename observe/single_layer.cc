#include "observe/single_layer.h"

#include "leadsman/runner.h"

namespace leadsman {

Tensor run_layer(const Layer& layer, const WeightMap& weights, std::span<const Tensor> inputs,
                 PlanOptions options) {
  Graph graph;
  graph.name = layer.name;
  Layer alone = layer;
  options.input_shapes.clear();
  for (std::size_t i = 0; i < inputs.size(); ++i) {
    // The layer may read one tensor twice: each use becomes an input of its own.
    alone.inputs[i] = "input " + std::to_string(i);
    const auto sizes = inputs[i].shape().sizes();
    graph.inputs.push_back(
        {.name = alone.inputs[i], .shape = {sizes.begin(), sizes.end()}, .usual_size = {}});
    options.input_shapes.push_back(inputs[i].shape());
  }
  graph.outputs = {layer.name};
  graph.layers = {std::move(alone)};
  Runner runner(Plan::make(graph, weights, options));
  runner.run(inputs);
  return to_tensor(runner.output());
}

}  // namespace leadsman
