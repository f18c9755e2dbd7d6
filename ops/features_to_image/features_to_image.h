// [N, C] as an image of one position: the same bytes.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& features_to_image_operator();

}  // namespace leadsman::ops
