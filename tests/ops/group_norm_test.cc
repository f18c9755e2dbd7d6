#include "ops/group_norm/group_norm.h"

#include <cmath>
#include <limits>

#include <gtest/gtest.h>

#include "tests/support/compare.h"
#include "tests/support/fast_against_reference.h"
#include "tests/support/op_runner.h"
#include "tests/support/random.h"

namespace leadsman::testing {
namespace {

TEST(GroupNormRows, AgreesWithTheReferenceOnRandomShapes) {
  Random random(45);
  for (int i = 0; i < 60; ++i) {
    const std::int64_t groups = random.integer(1, 6);
    const std::int64_t channels = groups * random.integer(1, 40);
    // Images of one block of rows and of several.
    const Shape shape{random.integer(1, 3), channels, random.integer(1, 40), random.integer(2, 40)};
    OpCase c{.op = "group_norm", .inputs = {random.tensor(shape, -1.0, 3.0)}};
    c.attributes.set("groups", groups);
    if (random.coin()) c.weights["weight"] = random.tensor({channels});
    if (random.coin()) c.weights["bias"] = random.tensor({channels});
    if (random.coin()) c.attributes.set("eps", 1e-3);
    SCOPED_TRACE(shape.to_string() + " groups " + std::to_string(groups));
    check_fast_strategy(c, "rows");
    expect_same_bits(run_op(c, "rows", {.threads = 2, .in_place = true}), run_op(c, "rows"));
  }
}

// The difference from the mean, not the value, decides what is lost.
TEST(GroupNormRows, KeepsSmallDifferencesFromALargeMean) {
  Random random(46);
  OpCase c{.op = "group_norm", .inputs = {random.tensor({2, 6, 19, 23}, 1000.0, 1001.0)}};
  c.attributes.set("groups", std::int64_t{2});
  expect_close(run_op(c, "rows"), run_op(c, "reference"), 1);
}

TEST(GroupNorm, EveryGroupHasMeanZeroAndVarianceOne) {
  Random random(47);
  OpCase c{.op = "group_norm", .inputs = {random.tensor({2, 6, 11, 13}, 100.0, 104.0)}};
  c.attributes.set("groups", std::int64_t{3});
  for (const std::string& strategy : strategy_names("group_norm")) {
    const Tensor y = run_op(c, strategy);
    const std::int64_t count = 2 * 11 * 13;  // of a group, which lies together in logical order
    for (std::int64_t group = 0; group < 6; ++group) {
      double mean = 0.0;
      double square = 0.0;
      for (std::int64_t i = group * count; i < (group + 1) * count; ++i) {
        const auto value = static_cast<double>(y.data()[i]);
        mean += value / static_cast<double>(count);
        square += value * value / static_cast<double>(count);
      }
      EXPECT_NEAR(mean, 0.0, 1e-6) << strategy;
      EXPECT_NEAR(square, 1.0, 2e-5) << strategy;  // eps is 1e-5 and the variance 1.3
    }
  }
}

TEST(GroupNorm, NanAndInfinityFillTheirGroupAlone) {
  Random random(48);
  OpCase c{.op = "group_norm", .inputs = {random.tensor({1, 6, 3, 3})}};
  c.attributes.set("groups", std::int64_t{3});
  for (const float wrong :
       {std::numeric_limits<float>::quiet_NaN(), std::numeric_limits<float>::infinity()}) {
    c.inputs[0].mutable_data()[3 * 9 + 4] = wrong;  // channel 3, of the second group
    for (const std::string& strategy : strategy_names("group_norm")) {
      const Tensor y = run_op(c, strategy);
      for (std::int64_t i = 0; i < y.elements(); ++i) {
        EXPECT_EQ(std::isnan(y.data()[i]), i / 18 == 1) << strategy << ", value " << i;
      }
    }
  }
}

}  // namespace
}  // namespace leadsman::testing
