// The largest value under a sliding window, per channel (Scherer et al. 2010):
//
//   y[n, c, i, j] = max over u, v of x[n, c, i*s_h + u*d_h - p_top, j*s_w + v*d_w - p_left]
//
// Positions outside the image never count (as if they held -infinity); a NaN under the window is
// the result.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& max_pool_operator();

}  // namespace leadsman::ops
