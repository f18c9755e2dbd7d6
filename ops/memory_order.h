// What a run does to its inputs first.
#pragma once

#include "leadsman/tensor.h"

namespace leadsman::ops {

/// copy_from_logical() by vectors and threads.
void to_memory_order(const float* from, const TensorView& to, int threads);

}  // namespace leadsman::ops
