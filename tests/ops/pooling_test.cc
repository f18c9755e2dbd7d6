// Properties of the poolings, and their vector kernels against the plain ones on random shapes.
#include <cmath>
#include <limits>

#include <gtest/gtest.h>

#include "ops/simd/target.h"
#include "tests/support/compare.h"
#include "tests/support/op_runner.h"
#include "tests/support/random.h"

namespace leadsman::testing {
namespace {

using Pair = std::vector<std::int64_t>;

constexpr float kNan = std::numeric_limits<float>::quiet_NaN();
constexpr float kInfinity = std::numeric_limits<float>::infinity();

OpCase random_pool(Random& random, const std::string& op) {
  OpCase c{.op = op};
  Pair kernel{random.integer(1, 4), random.integer(1, 4)};
  Pair padding(4);
  for (std::size_t i = 0; i < 4; ++i) padding[i] = random.integer(0, kernel[i % 2] - 1);
  c.attributes.set("kernel_size", kernel);
  c.attributes.set("stride", Pair{random.integer(0, 3), random.integer(0, 3)});
  c.attributes.set("padding", padding);
  c.attributes.set("ceil_mode", random.coin());
  if (op == "max_pool") {
    c.attributes.set("dilation", Pair{random.integer(1, 2), random.integer(1, 2)});
  } else {
    c.attributes.set("count_padding", random.coin());
  }
  c.inputs = {random.tensor(
      {random.integer(1, 2), random.integer(1, 80), random.integer(7, 12), random.integer(7, 12)})};
  return c;
}

OpCase random_mean(Random& random) {
  OpCase c{.op = random.coin() ? "mean" : "adaptive_avg_pool"};
  const std::int64_t channels = random.integer(1, 150);
  if (c.op == "mean" && random.coin()) {
    c.inputs = {random.tensor({random.integer(1, 3), random.integer(1, 200), channels})};
    return c;
  }
  c.inputs = {random.tensor(
      {random.integer(1, 3), channels, random.integer(1, 20), random.integer(1, 20)})};
  if (c.op == "adaptive_avg_pool") {
    c.attributes.set("output_size", Pair{random.integer(1, 4), random.integer(1, 4)});
  }
  return c;
}

void expect_rows_agree(const OpCase& c) {
  const Tensor expected = run_op(c, "reference");
  for (const std::string& target : ops::simd::supported_targets()) {
    SCOPED_TRACE(c.op + " of " + c.inputs[0].shape().to_string() + ", " + target);
    const ops::simd::ForcedTarget forced(target);
    const Tensor actual = run_op(c, "rows");
    expect_close(actual, expected, op_cost(c).reduction, rms(c.inputs[0]));
    expect_same_bits(run_op(c, "rows", {.threads = 3}), actual);
  }
}

// With some values that are not finite.
void expect_rows_give_the_same_bits(Random& random, OpCase c) {
  float* values = c.inputs[0].mutable_data();
  for (int k = 0; k < 20; ++k) {
    values[random.integer(0, c.inputs[0].elements() - 1)] =
        random.pick(std::vector<float>{kNan, kInfinity, -kInfinity});
  }
  const Tensor expected = run_op(c, "reference");
  for (const std::string& target : ops::simd::supported_targets()) {
    SCOPED_TRACE(c.inputs[0].shape().to_string() + ", " + target);
    const ops::simd::ForcedTarget forced(target);
    expect_same_bits(run_op(c, "rows"), expected);
    expect_same_bits(run_op(c, "rows", {.threads = 3}), expected);
  }
}

TEST(MaxPoolRows, AgreesWithTheReferenceOnRandomShapes) {
  Random random(31);
  for (int i = 0; i < 40; ++i) {
    expect_rows_give_the_same_bits(random, random_pool(random, "max_pool"));
  }
}

TEST(AdaptiveMaxPoolRows, AgreesWithTheReferenceOnRandomShapes) {
  Random random(37);
  for (int i = 0; i < 40; ++i) {
    OpCase c{.op = "adaptive_max_pool",
             .inputs = {random.tensor({random.integer(1, 3), random.integer(1, 150),
                                       random.integer(1, 20), random.integer(1, 20)})}};
    c.attributes.set("output_size", Pair{random.integer(1, 9), random.integer(1, 9)});
    expect_rows_give_the_same_bits(random, c);
  }
}

TEST(AvgPoolRows, AgreesWithTheReferenceOnRandomShapes) {
  Random random(32);
  for (int i = 0; i < 40; ++i) expect_rows_agree(random_pool(random, "avg_pool"));
}

TEST(MeanRows, AgreesWithTheReferenceOnRandomShapes) {
  Random random(33);
  for (int i = 0; i < 40; ++i) expect_rows_agree(random_mean(random));
}

// A plain float sum of these 250000 values would be off by some 1e-4 of the mean: its spacing
// near 2.5e7 is 2. Partial sums keep two more digits.
TEST(MeanRows, StaysAccurateOverLargeImages) {
  Random random(34);
  const OpCase c{.op = "mean", .inputs = {random.tensor({1, 16, 500, 500}, 99.0, 101.0)}};
  const Tensor expected = run_op(c, "reference");
  for (const std::string& target : ops::simd::supported_targets()) {
    const ops::simd::ForcedTarget forced(target);
    const Tensor actual = run_op(c, "rows");
    for (std::int64_t i = 0; i < 16; ++i) {
      EXPECT_NEAR(actual.data()[i], expected.data()[i], 100 * 64 * kUnitRoundoff) << target;
    }
  }
}

TEST(MaxPool, OfANegatedImageIsItsNegatedMinimum) {
  Random random(35);
  OpCase c{.op = "max_pool", .inputs = {random.tensor({1, 3, 6, 6})}};
  c.attributes.set("kernel_size", std::int64_t{2});
  OpCase negated = c;
  for (float* x = negated.inputs[0].mutable_data();
       x != negated.inputs[0].data() + negated.inputs[0].elements(); ++x) {
    *x = -*x;
  }
  const Tensor minimum = run_op(negated, "reference");
  for (std::int64_t channel = 0; channel < 3; ++channel) {
    for (std::int64_t i = 0; i < 3; ++i) {
      for (std::int64_t j = 0; j < 3; ++j) {
        const float* x = c.inputs[0].data() + channel * 36 + 2 * i * 6 + 2 * j;
        EXPECT_EQ(-minimum.data()[channel * 9 + i * 3 + j],
                  std::min(std::min(x[0], x[1]), std::min(x[6], x[7])));
      }
    }
  }
}

// The mean of ones is one, unless padding counts.
TEST(AvgPool, CountsPaddingOnlyWhenAsked) {
  Tensor ones(Shape{1, 1, 5, 5});
  std::fill_n(ones.mutable_data(), 25, 1.0F);
  OpCase c{.op = "avg_pool", .inputs = {ones}};
  c.attributes.set("kernel_size", std::int64_t{3});
  c.attributes.set("stride", std::int64_t{2});
  c.attributes.set("padding", std::int64_t{1});
  for (const std::string& strategy : strategy_names("avg_pool")) {
    c.attributes.set("count_padding", false);
    const Tensor not_counted = run_op(c, strategy);
    for (const float value : not_counted.values()) EXPECT_EQ(value, 1.0F);
    c.attributes.set("count_padding", true);
    const Tensor counted = run_op(c, strategy);
    EXPECT_EQ(counted.data()[0], static_cast<float>(4.0 / 9.0));
    EXPECT_EQ(counted.data()[1], static_cast<float>(6.0 / 9.0));
    EXPECT_EQ(counted.data()[4], 1.0F);
  }
}

TEST(AdaptivePools, EqualThePoolsWhereTheSizesDivide) {
  Random random(36);
  for (const std::string op : {"avg_pool", "max_pool"}) {
    OpCase adaptive{.op = "adaptive_" + op, .inputs = {random.tensor({2, 9, 12, 8})}};
    adaptive.attributes.set("output_size", Pair{4, 2});
    OpCase pool{.op = op, .inputs = adaptive.inputs};
    pool.attributes.set("kernel_size", Pair{3, 4});
    expect_same_bits(run_op(adaptive, "reference"), run_op(pool, "reference"));
  }
}

}  // namespace
}  // namespace leadsman::testing
