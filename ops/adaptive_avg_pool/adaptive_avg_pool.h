// Means that bring an image of any size to a given one. Output row i of `out` is the mean of the
// input rows floor(i * in / out) .. ceil((i + 1) * in / out) - 1, columns alike: neighbouring
// windows overlap where `in` is not a multiple of `out` (the reference library's rule).
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& adaptive_avg_pool_operator();

}  // namespace leadsman::ops
