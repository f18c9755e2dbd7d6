// The mean under a sliding window, per channel. With count_padding the divisor is the part of the
// window inside the padded image, padding included; without it, the part inside the image. (What
// hangs over the padded image in ceil_mode never counts: the reference library's rule.)
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& avg_pool_operator();

}  // namespace leadsman::ops
