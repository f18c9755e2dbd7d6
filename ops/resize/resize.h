// An image enlarged by whole factors. Pixel i of the output has its centre at (i + 0.5) / factor in
// the input; it takes the pixel there, or mixes the two or four nearest of each axis, the edge
// repeated: linearly, or by the cubic of Keys 1981 with a = -0.75.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& resize_operator();

}  // namespace leadsman::ops
