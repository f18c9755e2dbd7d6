// y = x: dropout, and whatever else does nothing at inference. The planner drops it.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& identity_operator();

}  // namespace leadsman::ops
