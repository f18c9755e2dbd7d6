// The positions of an image, row by row, as tokens: [N, C, H, W] to [N, H*W, C] (Dosovitskiy et al.
// 2021). In memory they are the same bytes.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& image_to_tokens_operator();

}  // namespace leadsman::ops
