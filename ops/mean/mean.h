// The mean over all positions of an item, per channel (Lin et al. 2014).
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& mean_operator();

}  // namespace leadsman::ops
