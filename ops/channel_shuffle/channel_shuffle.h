// Channels of g groups of k interleaved: channel i * k + j goes to j * g + i (Zhang et al. 2018).
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& channel_shuffle_operator();

}  // namespace leadsman::ops
