// The check that every fast strategy has to pass: close to the reference kernel on every
// instruction set, the same bits for any number of threads.
#pragma once

#include <string>
#include <string_view>

#include "tests/support/op_runner.h"
#include "tests/support/random.h"

namespace leadsman::testing {

/// Gives the case one of all activations and, by chance, a residual of the output's shape.
void add_random_epilogue(Random& random, OpCase& c);

/// `factor` as in rounding_threshold(). The magnitude of the sums is taken from the case without
/// its activation.
void check_fast_strategy(const OpCase& c, std::string_view strategy, double factor = 8.0);

}  // namespace leadsman::testing
