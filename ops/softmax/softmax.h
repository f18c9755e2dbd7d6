// y_c = exp(x_c - m) / sum over k of exp(x_k - m), m the largest x_k, over the channels of each
// position (Bridle 1990).
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& softmax_operator();

}  // namespace leadsman::ops
