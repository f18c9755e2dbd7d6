// Products, value by value: y = a * b of one shape, or each channel of an image [N, C, H, W] times
// its own factor [N, C, 1, 1], as squeeze-and-excitation does (Hu et al. 2018).
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& mul_operator();

}  // namespace leadsman::ops
