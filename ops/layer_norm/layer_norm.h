// Layer normalisation over the channels of each position (Ba, Kiros & Hinton 2016):
//
//   y[p, c] = (x[p, c] - mean_p) / sqrt(variance_p + eps) * weight[c] + bias[c]
//
// with the mean and the (biased) variance of the channels of position p.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& layer_norm_operator();

const Strategy& layer_norm_vector();     ///< "vector": simd/reduce.h
const Strategy& layer_norm_reference();  ///< "reference": plain loops in double

}  // namespace leadsman::ops
