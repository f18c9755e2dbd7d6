#include "ops/layer_norm/layer_norm.h"

#include <array>
#include <cmath>
#include <limits>

#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "tests/support/compare.h"
#include "tests/support/fast_against_reference.h"
#include "tests/support/op_runner.h"
#include "tests/support/random.h"
#include "tests/support/targets.h"

namespace leadsman::testing {
namespace {

TEST(LayerNormVector, AgreesWithTheReferenceOnRandomShapes) {
  constexpr std::array<std::int64_t, 10> kChannels = {2, 3, 5, 16, 17, 31, 33, 64, 192, 769};
  Random random(40);
  for (int i = 0; i < 60; ++i) {
    const std::int64_t channels = random.pick(kChannels);
    const std::array shapes = {Shape{random.integer(1, 40), channels},
                               Shape{random.integer(1, 3), random.integer(1, 40), channels},
                               Shape{random.integer(1, 3), channels, random.integer(1, 6), 5}};
    OpCase c{.op = "layer_norm", .inputs = {random.tensor(random.pick(shapes), -1.0, 3.0)}};
    if (random.coin()) c.weights["weight"] = random.tensor({channels});
    if (random.coin()) c.weights["bias"] = random.tensor({channels});
    if (random.coin()) c.attributes.set("eps", 1e-6);
    SCOPED_TRACE(c.inputs[0].shape().to_string());
    // With few channels a small variance magnifies what the subtraction of the mean rounds.
    check_fast_strategy(c, "vector", channels < 8 ? 1000.0 : 8.0);
    on_every_target([&] {
      expect_same_bits(run_op(c, "vector", {.threads = 2, .in_place = true}), run_op(c, "vector"));
    });
  }
}

TEST(LayerNorm, EveryPositionHasMeanZeroAndVarianceOne) {
  Random random(41);
  const OpCase c{.op = "layer_norm", .inputs = {random.tensor({2, 7, 100}, 100.0, 104.0)}};
  for (const std::string& strategy : strategy_names("layer_norm")) {
    on_every_target([&] {
      const Tensor y = run_op(c, strategy);
      for (std::int64_t row = 0; row < 14; ++row) {
        double mean = 0.0;
        double square = 0.0;
        for (std::int64_t i = 0; i < 100; ++i) {
          const auto value = static_cast<double>(y.data()[row * 100 + i]);
          mean += value / 100.0;
          square += value * value / 100.0;
        }
        EXPECT_NEAR(mean, 0.0, 2e-5);
        EXPECT_NEAR(square, 1.0, 5e-5);
      }
    });
  }
}

TEST(LayerNorm, NanStaysInItsPosition) {
  Random random(42);
  OpCase c{.op = "layer_norm", .inputs = {random.tensor({3, 40})}};
  c.inputs[0].mutable_data()[40 + 7] = std::numeric_limits<float>::quiet_NaN();
  for (const std::string& strategy : strategy_names("layer_norm")) {
    on_every_target([&] {
      const Tensor y = run_op(c, strategy);
      for (std::int64_t i = 0; i < 120; ++i) EXPECT_EQ(std::isnan(y.data()[i]), i / 40 == 1);
    });
  }
}

TEST(LayerNorm, WrongWeightsAreRefused) {
  Random random(43);
  OpCase c{.op = "layer_norm", .inputs = {random.tensor({3, 40})}};
  c.weights["weight"] = random.tensor({41});
  EXPECT_THROW(op_output_shape(c), Error);
}

}  // namespace
}  // namespace leadsman::testing
