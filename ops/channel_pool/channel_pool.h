// The mean, or the largest, of a position's channels: what spatial attention looks at (Woo et al.
// 2018, "pooling along the channel axis").
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& channel_pool_operator();

}  // namespace leadsman::ops
