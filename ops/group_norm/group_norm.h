// Normalisation over the positions of an image and the channels of a group (Wu & He 2018):
//
//   y = (x - mean) / sqrt(variance + eps) * weight[c] + bias[c]
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& group_norm_operator();

const Strategy& group_norm_rows();  ///< "rows": channels side by side, values in float

}  // namespace leadsman::ops
