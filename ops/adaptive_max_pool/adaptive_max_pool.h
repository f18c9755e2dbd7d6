// Largest values that bring an image of any size to a given one; [1, 1] is the largest of the
// image.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& adaptive_max_pool_operator();

}  // namespace leadsman::ops
