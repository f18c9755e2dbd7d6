// Operators on tokens: what interpolated positions, softmax and moves of values must keep.
#include <cmath>

#include <gtest/gtest.h>

#include "ops/position_embed/position_embed.h"
#include "tests/support/compare.h"
#include "tests/support/op_runner.h"
#include "tests/support/random.h"

namespace leadsman::testing {
namespace {

using ops::interpolate_grid;

TEST(InterpolateGrid, KeepsAConstant) {
  const std::vector<float> grid(4 * 5 * 2, 3.25F);
  for (const float value : interpolate_grid(grid.data(), 4, 5, 2, 7, 3)) {
    EXPECT_FLOAT_EQ(value, 3.25F);
  }
}

TEST(InterpolateGrid, KeepsTheCornersAndEveryPointThatCoincides) {
  Random random(51);
  const Tensor grid = random.tensor({4, 4, 3});
  // From 4 to 7 every other point lies on a stored one.
  const std::vector<float> fine = interpolate_grid(grid.data(), 4, 4, 3, 7, 7);
  for (std::int64_t y = 0; y < 4; ++y) {
    for (std::int64_t x = 0; x < 4; ++x) {
      for (std::int64_t c = 0; c < 3; ++c) {
        EXPECT_EQ(fine[static_cast<std::size_t>((2 * y * 7 + 2 * x) * 3 + c)],
                  grid.data()[(y * 4 + x) * 3 + c]);
      }
    }
  }
}

// Halfway between two points: the kernel of Keys 1981 at distances 1.5, 0.5, 0.5 and 1.5,
// for a = -0.75: -0.09375 and 0.59375.
TEST(InterpolateGrid, WeighsFourNeighbours) {
  const std::vector<float> row{1, 10, 100, 1000};
  const std::vector<float> fine = interpolate_grid(row.data(), 1, 4, 1, 1, 7);
  EXPECT_FLOAT_EQ(fine[3], static_cast<float>(0.59375 * (10 + 100) - 0.09375 * (1 + 1000)));
  // Beyond the edge the outermost value repeats.
  EXPECT_FLOAT_EQ(fine[1], static_cast<float>(0.59375 * (1 + 10) - 0.09375 * (1 + 100)));
}

TEST(InterpolateGrid, TurnsWithItsInput) {
  Random random(52);
  const Tensor grid = random.tensor({3, 5});
  Tensor turned(Shape{5, 3});
  for (std::int64_t y = 0; y < 3; ++y) {
    for (std::int64_t x = 0; x < 5; ++x) {
      turned.mutable_data()[x * 3 + y] = grid.data()[y * 5 + x];
    }
  }
  const std::vector<float> a = interpolate_grid(grid.data(), 3, 5, 1, 7, 4);
  const std::vector<float> b = interpolate_grid(turned.data(), 5, 3, 1, 4, 7);
  for (std::size_t y = 0; y < 7; ++y) {
    for (std::size_t x = 0; x < 4; ++x) EXPECT_NEAR(a[y * 4 + x], b[x * 7 + y], 1e-7);
  }
}

// Only the grid's height and width count, not its batch or channels.
TEST(PositionEmbed, ReadsNothingOfThePatchGridButItsSize) {
  Random random(53);
  OpCase c{.op = "position_embed",
           .inputs = {random.tensor({2, 13, 4}), Tensor(Shape{1, 7, 3, 4})},
           .weights = {{"weight", random.tensor({1, 5, 4})}}};
  const Tensor expected = run_op(c, "reference");
  c.inputs[1] = random.tensor({2, 1, 3, 4});
  expect_same_bits(run_op(c, "reference"), expected);
}

TEST(PositionEmbed, HoldsATableOnlyWhereItInterpolates) {
  Random random(54);
  OpCase c{.op = "position_embed",
           .inputs = {random.tensor({1, 5, 4}), Tensor(Shape{1, 4, 2, 2})},
           .weights = {{"weight", random.tensor({1, 5, 4})}}};
  const ops::Strategy& strategy = *ops::find_operator("position_embed")->strategies().back();
  EXPECT_EQ(strategy.prepare(op_context(c), {})->packed_bytes(), 0U);
  c.inputs = {random.tensor({1, 10, 4}), Tensor(Shape{1, 4, 3, 3})};
  EXPECT_EQ(strategy.prepare(op_context(c), {})->packed_bytes(), 10U * 4U * sizeof(float));
}

TEST(Softmax, SumsToOneAndIgnoresAShift) {
  Random random(55);
  const Tensor x = random.tensor({4, 3, 20}, -5, 5);
  const Tensor y = run_op({.op = "softmax", .inputs = {x}}, "reference");
  for (std::int64_t row = 0; row < 12; ++row) {
    double sum = 0.0;
    for (std::int64_t c = 0; c < 20; ++c) sum += static_cast<double>(y.data()[row * 20 + c]);
    EXPECT_NEAR(sum, 1.0, 20 * kUnitRoundoff);
  }
  Tensor shifted = x;
  for (float* value = shifted.mutable_data(); value != shifted.data() + shifted.elements();
       ++value) {
    *value += 64.0F;
  }
  expect_close(run_op({.op = "softmax", .inputs = {shifted}}, "reference"), y, 1, 64.0);
}

// Taking the first tokens away again gives back what was there.
TEST(ClassToken, IsUndoneBySelect) {
  Random random(56);
  const Tensor x = random.tensor({2, 4, 6});
  const Tensor tokens = random.tensor({1, 2, 6});
  const Tensor joined =
      run_op({.op = "class_token", .inputs = {x}, .weights = {{"weight", tokens}}}, "reference");
  for (std::int64_t t = 0; t < 6; ++t) {
    OpCase c{.op = "select", .inputs = {joined}};
    c.attributes.set("index", t);
    const Tensor y = run_op(c, "reference");
    for (std::int64_t n = 0; n < 2; ++n) {
      for (std::int64_t k = 0; k < 6; ++k) {
        const float expected = t < 2 ? tokens.data()[t * 6 + k] : x.data()[(n * 4 + t - 2) * 6 + k];
        EXPECT_EQ(y.data()[n * 6 + k], expected);
      }
    }
  }
}

// Where memory order is logical order already, nothing is copied.
TEST(Flatten, IsAViewWhereverTheBytesAgree) {
  const auto is_view = [](const Shape& shape) {
    const OpCase c{.op = "flatten", .inputs = {Tensor(shape)}};
    return ops::find_operator("flatten")->is_view(op_context(c));
  };
  EXPECT_TRUE(is_view({2, 5}));
  EXPECT_TRUE(is_view({2, 5, 3}));
  EXPECT_TRUE(is_view({2, 5, 1, 1}));
  EXPECT_TRUE(is_view({2, 1, 3, 4}));
  EXPECT_FALSE(is_view({2, 5, 1, 2}));
  EXPECT_FALSE(is_view({2, 2, 2, 2}));
}

TEST(ImageToTokensAndIdentity, AreAlwaysViews) {
  for (const char* op : {"image_to_tokens", "identity"}) {
    const OpCase c{.op = op, .inputs = {Tensor(Shape{2, 3, 4, 5})}};
    EXPECT_TRUE(ops::find_operator(op)->is_view(op_context(c))) << op;
  }
}

// Every strategy copes with an empty batch.
TEST(EmptyBatch, GivesAnEmptyOutput) {
  const Tensor image(Shape{0, 3, 4, 4});
  for (const char* op : {"flatten", "image_to_tokens", "mean", "identity"}) {
    EXPECT_EQ(run_op({.op = op, .inputs = {image}}, "reference").elements(), 0) << op;
  }
  EXPECT_EQ(op_output_shape({.op = "flatten", .inputs = {image}}), (Shape{0, 48}));
  for (const std::string& strategy : strategy_names("add")) {
    EXPECT_EQ(run_op({.op = "add", .inputs = {image, image}}, strategy).elements(), 0);
  }
  OpCase pool{.op = "max_pool", .inputs = {image}};
  pool.attributes.set("kernel_size", std::int64_t{2});
  for (const std::string& strategy : strategy_names("max_pool")) {
    EXPECT_EQ(run_op(pool, strategy).shape(), (Shape{0, 3, 2, 2}));
  }
}

}  // namespace
}  // namespace leadsman::testing
