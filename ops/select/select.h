// One token of each item: y[n, c] = x[n, index, c].
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& select_operator();

}  // namespace leadsman::ops
