// y = a + b, of one shape: the joint of residual networks (He et al. 2016). The planner makes it
// the epilogue of a matrix product where it can; these kernels are for where it cannot.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& add_operator();

const Strategy& add_rows();
const Strategy& add_reference();

}  // namespace leadsman::ops
