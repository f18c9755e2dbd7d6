#include <array>
#include <cstdint>

#include <gtest/gtest.h>

#include "tests/support/compare.h"
#include "tests/support/fast_against_reference.h"
#include "tests/support/op_runner.h"
#include "tests/support/random.h"
#include "tests/support/targets.h"

namespace leadsman::testing {
namespace {

OpCase linear_case(Random& random, const Shape& input, std::int64_t out, bool bias) {
  OpCase c{.op = "linear", .inputs = {random.tensor(input)}};
  c.weights["weight"] = random.tensor({out, channel_count(input)});
  if (bias) c.weights["bias"] = random.tensor({out});
  return c;
}

TEST(Linear, IdentityWeightReturnsTheInput) {
  Random random(1);
  Tensor eye(Shape{21, 21});
  for (int i = 0; i < 21; ++i) eye.mutable_data()[i * 22] = 1.0F;
  const Tensor x = random.tensor({2, 19, 21});
  on_every_target([&] {
    for (const std::string& strategy : strategy_names("linear")) {
      SCOPED_TRACE(strategy);
      expect_same_bits(
          run_op({.op = "linear", .inputs = {x}, .weights = {{"weight", eye}}}, strategy), x);
    }
  });
}

TEST(LinearMatrix, AgreesWithTheReferenceOnRandomShapes) {
  constexpr std::array<std::int64_t, 12> kChannels = {1,  3,  5,  15, 16,  17,
                                                      31, 33, 64, 65, 100, 200};
  Random random(2);
  for (int i = 0; i < 120; ++i) {
    const std::int64_t channels = random.pick(kChannels);
    const Shape input = random.coin()
                            ? Shape{random.integer(1, 40), channels}
                            : Shape{random.integer(1, 3), random.integer(1, 40), channels};
    OpCase c = linear_case(random, input, random.pick(kChannels), random.coin());
    add_random_epilogue(random, c);
    SCOPED_TRACE(input.to_string() + " to " + op_output_shape(c).to_string() + " " +
                 std::string(ops::activation_name(c.activation.kind)));
    check_fast_strategy(c, "matrix");
    if (HasFailure()) return;
  }
}

TEST(LinearMatrix, AgreesWithTheReferenceOnManyTasks) {
  Random random(3);
  for (const auto& [input, out] : {std::pair<Shape, std::int64_t>{{1, 512}, 1000},
                                   {{2, 197, 96}, 388},
                                   {{3, 257}, 777},
                                   {{1, 900, 64}, 72}}) {
    OpCase c = linear_case(random, input, out, true);
    add_random_epilogue(random, c);
    SCOPED_TRACE(input.to_string());
    check_fast_strategy(c, "matrix");
  }
}

// The sum of one value does not depend on how many rows or columns are computed beside it.
TEST(LinearMatrix, ARowAloneHasTheSameBits) {
  Random random(4);
  OpCase all = linear_case(random, {23, 70}, 50, true);
  on_every_target([&] {
    const Tensor y = run_op(all, "matrix");
    OpCase one = all;
    one.inputs = {Tensor({1, 70}, {all.inputs[0].data() + 7 * 70, all.inputs[0].data() + 8 * 70})};
    const Tensor row = run_op(one, "matrix");
    for (std::int64_t o = 0; o < 50; ++o) EXPECT_EQ(row.data()[o], y.data()[7 * 50 + o]);
  });
}

}  // namespace
}  // namespace leadsman::testing
