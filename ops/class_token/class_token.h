// Learned tokens put before the others (Devlin et al. 2019; Dosovitskiy et al. 2021).
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& class_token_operator();

}  // namespace leadsman::ops
