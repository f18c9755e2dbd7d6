// y = f(x), value by value; the functions are listed in ops/epilogue.h. Runs in place.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& activation_operator();

/// The function that a layer's attributes name.
Activation activation_of(const Attributes& attributes);

const Strategy& activation_vector();     ///< "vector": simd/activation.h
const Strategy& activation_reference();  ///< "reference": activate() in double

}  // namespace leadsman::ops
