// Operator cases as PyTorch computed them, stored in tests/data/operators/ by
// tests/ops/make_operator_cases.py and make_arrangement_cases.py.
#pragma once

#include <string>
#include <string_view>
#include <vector>

#include "tests/support/op_runner.h"

namespace leadsman::testing {

struct StoredCase {
  std::string name;
  OpCase call;
  Tensor expected;
};

/// Every case of the operator's files, NAME.safetensors and NAME+WHAT.safetensors. Throws
/// Error(kInput) when there are none.
std::vector<StoredCase> stored_cases(std::string_view op);

}  // namespace leadsman::testing
