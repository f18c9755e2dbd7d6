// y = x / max(sqrt(sum over the channels of x^2), eps), position by position.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& l2_normalize_operator();

}  // namespace leadsman::ops
