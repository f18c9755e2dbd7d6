// window_attention: the kernel that reads windows in place against plain loops; what windows mean.
#include "ops/window_attention/window_attention.h"

#include <set>

#include <gtest/gtest.h>

#include "tests/support/compare.h"
#include "tests/support/fast_against_reference.h"
#include "tests/support/op_runner.h"
#include "tests/support/random.h"

namespace leadsman::testing {
namespace {

using Pair = std::vector<std::int64_t>;

OpCase random_case(Random& random) {
  const std::int64_t heads = random.integer(1, 4);
  const std::int64_t d = random.pick(std::array<std::int64_t, 6>{1, 3, 8, 17, 32, 33});
  const std::int64_t h = random.integer(1, 6);
  const std::int64_t w = random.integer(1, 6);
  const bool grid = random.integer(0, 3) == 0;
  const std::int64_t height = grid ? h * random.integer(1, 3) : random.integer(1, 14);
  const std::int64_t width = grid ? w * random.integer(1, 3) : random.integer(1, 14);
  OpCase c{.op = "window_attention",
           .inputs = {random.tensor({random.integer(1, 2), 3 * heads * d, height, width}, -2, 2)}};
  c.attributes.set("heads", heads);
  c.attributes.set("window", Pair{h, w});
  if (grid) {
    c.attributes.set("arrangement", std::string("grid"));
  } else {
    c.attributes.set("shift", Pair{random.integer(0, h - 1), random.integer(0, w - 1)});
  }
  c.attributes.set("cosine", random.coin());
  if (random.coin()) {
    c.weights["position_bias"] = random.tensor({(2 * h - 1) * (2 * w - 1), heads}, -2, 2);
  }
  if (random.coin()) c.weights["head_scale"] = random.tensor({heads}, 0.5, 4);
  if (random.coin()) c.weights["padding"] = random.tensor({3 * heads * d});
  return c;
}

TEST(WindowAttentionBlocked, AgreesWithTheReferenceOnRandomShapes) {
  Random random(61);
  for (int i = 0; i < 60; ++i) {
    const OpCase c = random_case(random);
    const Pair& window = std::get<Pair>(c.attributes.values().at("window"));
    SCOPED_TRACE(c.inputs[0].shape().to_string() + ", window " + std::to_string(window[0]) + "x" +
                 std::to_string(window[1]));
    check_fast_strategy(c, "blocked", 16.0);
  }
}

// More positions than attention takes at once: windows go block by block of keys, with the bias.
TEST(WindowAttentionBlocked, LargeWindowsAgreeWithTheReference) {
  Random random(62);
  OpCase c{.op = "window_attention", .inputs = {random.tensor({1, 3 * 4, 25, 30}, -2, 2)}};
  c.attributes.set("heads", std::int64_t{1});
  c.attributes.set("window", Pair{24, 24});
  c.attributes.set("shift", Pair{11, 5});
  c.weights["position_bias"] = random.tensor({47 * 47, 1}, -2, 2);
  check_fast_strategy(c, "blocked", 16.0);
}

// A bundle of a few bytes may ask for windows whose tables no memory holds.
TEST(WindowAttentionBlocked, RefusesTablesThatNoModelNeeds) {
  const auto shifted = [](std::int64_t size, std::int64_t window) {
    OpCase c{.op = "window_attention", .inputs = {Tensor(Shape{1, 3, size, size})}};
    c.attributes.set("heads", std::int64_t{1});
    c.attributes.set("window", Pair{window, window});
    c.attributes.set("shift", Pair{1, 1});
    return c;
  };
  EXPECT_EQ(refusal(shifted(65, 64), "blocked"), "");
  EXPECT_EQ(refusal(shifted(129, 128), "blocked"),
            "tables of windows of 128 x 128 positions would take over 256 MB");
  EXPECT_EQ(refusal(shifted(1025, 1024), "blocked"),
            "tables of windows of 1024 x 1024 positions would take over 256 MB");
  EXPECT_EQ(refusal(shifted(129, 128), "reference"), "");
  // One window is not shifted: without a bias there is nothing to keep but where positions are.
  EXPECT_EQ(refusal(shifted(128, 128), "blocked"), "");
}

// One window over the whole map, no bias: attention between all positions.
TEST(WindowAttention, OfOneWindowIsAttention) {
  Random random(63);
  const Tensor x = random.tensor({2, 24, 5, 4}, -2, 2);
  OpCase windowed{.op = "window_attention", .inputs = {x}};
  windowed.attributes.set("heads", std::int64_t{2});
  windowed.attributes.set("window", Pair{5, 4});
  OpCase tokens{.op = "image_to_tokens", .inputs = {x}};
  OpCase whole{.op = "attention", .inputs = {run_op(tokens, "reference")}};
  whole.attributes.set("heads", std::int64_t{2});
  const Tensor expected = run_op(whole, "reference");
  const Tensor actual = run_op(windowed, "reference");
  for (std::int64_t n = 0; n < 2; ++n) {
    for (std::int64_t c = 0; c < 8; ++c) {
      for (std::int64_t t = 0; t < 20; ++t) {
        ASSERT_FLOAT_EQ(actual.data()[(n * 8 + c) * 20 + t], expected.data()[(n * 20 + t) * 8 + c]);
      }
    }
  }
}

// Every position of a map is in exactly one window, however it is cut.
TEST(WindowGeometry, CoversEachPositionOnce) {
  Random random(64);
  for (int i = 0; i < 100; ++i) {
    const ops::WindowGeometry g(op_context(random_case(random)));
    std::multiset<std::int64_t> seen;
    for (std::int64_t window = 0; window < g.windows(); ++window) {
      for (std::int64_t t = 0; t < g.tokens; ++t) {
        const std::int64_t at = g.position(window, t);
        if (at >= 0) seen.insert(at);
      }
    }
    ASSERT_EQ(seen.size(), static_cast<std::size_t>(g.height * g.width));
    ASSERT_EQ(std::set(seen.begin(), seen.end()).size(), seen.size());
  }
}

}  // namespace
}  // namespace leadsman::testing
