// y_c = x_c / (k + alpha / size * sum of x^2 over `size` channels around c)^beta (Krizhevsky et al.
// 2012; alpha divided by the size, as torch.nn.LocalResponseNorm has it).
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& local_response_norm_operator();

}  // namespace leadsman::ops
