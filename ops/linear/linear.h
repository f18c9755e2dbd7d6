// y = x W^T + b over the channels of each position. Weights come as [O, C].
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& linear_operator();

const Strategy& linear_matrix();     ///< "matrix": packed panels, any shape
const Strategy& linear_reference();  ///< "reference": plain loops in double

}  // namespace leadsman::ops
