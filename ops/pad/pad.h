// An image with more rows and columns at its sides: of one value, or of its own pixels, mirrored
// without the edge or the edge itself repeated.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& pad_operator();

}  // namespace leadsman::ops
