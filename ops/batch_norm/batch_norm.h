// Batch normalisation at inference (Ioffe & Szegedy 2015): each channel has its own affine map,
//
//   y = weight * (x - mean) / sqrt(variance + eps) + bias
//
// with the running mean and variance of training. The planner folds it into a convolution or
// linear layer in front of it; these kernels are for where it cannot.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& batch_norm_operator();

const Strategy& batch_norm_rows();
const Strategy& batch_norm_reference();

}  // namespace leadsman::ops
