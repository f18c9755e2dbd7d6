// The inputs' channels one after the other, position by position (Huang et al. 2017).
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& concat_operator();

}  // namespace leadsman::ops
