// [N, T, C] -> [N, C, T]: what mixes tokens is a linear map of the result (Tolstikhin et al. 2021).
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& transpose_operator();

}  // namespace leadsman::ops
