// One layer of a graph, run alone on given inputs.
#pragma once

#include <span>

#include "leadsman/plan.h"

namespace leadsman {

/// Plans a graph of this layer only, with `options` but for the input shapes, and runs it. `inputs`
/// are logical, one for each of the layer's. Throws what Plan::make throws.
Tensor run_layer(const Layer& layer, const WeightMap& weights, std::span<const Tensor> inputs,
                 PlanOptions options);

}  // namespace leadsman
