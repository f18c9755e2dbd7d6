// What attention multiplies its values by: p of attention/attention.h, [N, heads, T, S]; of rank 4
// and so stored as an image is, the heads innermost.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& attention_weights_operator();

const Strategy& attention_weights_blocked();    ///< "blocked": simd/attention.h
const Strategy& attention_weights_reference();  ///< "reference": plain loops in double

}  // namespace leadsman::ops
