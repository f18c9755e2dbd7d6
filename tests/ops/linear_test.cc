#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "tests/support/compare.h"
#include "tests/support/op_runner.h"
#include "tests/support/random.h"

namespace leadsman::testing {
namespace {

TEST(Linear, IdentityWeightReturnsTheInput) {
  Random random(1);
  Tensor eye(Shape{5, 5});
  for (int i = 0; i < 5; ++i) eye.mutable_data()[i * 6] = 1.0F;
  const Tensor x = random.tensor({2, 3, 5});
  for (const std::string& strategy : strategy_names("linear")) {
    SCOPED_TRACE(strategy);
    expect_same_bits(
        run_op({.op = "linear", .inputs = {x}, .weights = {{"weight", eye}}}, strategy), x);
  }
}

}  // namespace
}  // namespace leadsman::testing
