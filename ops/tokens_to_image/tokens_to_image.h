// [N, H*W, C] as an image [N, C, H, W], the opposite of image_to_tokens: the same bytes. H and W
// are those of the second input.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& tokens_to_image_operator();

}  // namespace leadsman::ops
