// Each block of bh x bw positions becomes one position with all their channels, zeros beyond the
// edge: the patch merging of Liu et al. 2021, whose blocks are read column by column.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& space_to_depth_operator();

}  // namespace leadsman::ops
