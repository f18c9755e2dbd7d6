// Some of the channels of every position, or some of the tokens.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& slice_operator();

}  // namespace leadsman::ops
