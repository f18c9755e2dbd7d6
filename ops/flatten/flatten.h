// All of one item's values in a row, in logical order: channels outermost, as the weights of a
// linear layer that follows expect them.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& flatten_operator();

}  // namespace leadsman::ops
