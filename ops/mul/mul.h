// Products, value by value: y = a * b of one shape, or of a full tensor and factors that are
// repeated over it: one for each channel of an item ([N, C, 1, 1] of an image, [N, 1, C] of
// tokens), as squeeze-and-excitation has them (Hu et al. 2018), or one for each position ([N, 1, H,
// W], [N, T, 1], [N, 1] of features), as spatial attention has them (Woo et al. 2018).
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& mul_operator();

}  // namespace leadsman::ops
