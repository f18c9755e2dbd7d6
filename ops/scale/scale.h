// y = factor * weight[c] * x + offset + bias[c]: layer scale (Touvron et al. 2021), inputs shifted
// and scaled by constants. `weight` and `bias` may have sizes of 1 beside the channels, as
// checkpoints do ([C], [C, 1, 1], [1, C, 1, 1]).
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& scale_operator();

}  // namespace leadsman::ops
