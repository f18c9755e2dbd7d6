#include "ops/conv2d/conv2d.h"

#include <array>
#include <cmath>
#include <iterator>
#include <limits>
#include <sstream>

#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "tests/ops/conv_case.h"
#include "tests/ops/tables.h"
#include "tests/support/compare.h"
#include "tests/support/fast_against_reference.h"
#include "tests/support/op_runner.h"
#include "tests/support/random.h"
#include "tests/support/targets.h"

namespace leadsman::testing {
namespace {

Geometry random_geometry(Random& random) {
  constexpr std::array<std::int64_t, 11> kChannels = {1, 2, 3, 4, 5, 16, 17, 31, 33, 48, 64};
  constexpr std::array<std::int64_t, 6> kKernels = {1, 1, 2, 3, 3, 5};
  Geometry g;
  g.n = random.integer(1, 3);
  g.c = random.pick(kChannels);
  g.out_c = random.pick(kChannels);
  g.kernel = {random.pick(kKernels), random.pick(kKernels)};
  g.stride = {random.integer(1, 3), random.integer(1, 3)};
  g.dilation = {random.integer(1, 2), random.integer(1, 2)};
  g.h = random.integer(1, 14) + (g.kernel[0] - 1) * g.dilation[0];
  g.w = random.integer(1, 14) + (g.kernel[1] - 1) * g.dilation[1];
  for (auto& side : g.padding) side = random.coin() ? random.integer(0, 3) : 0;
  return g;
}

TEST(Conv2dImplicit, AgreesWithTheReferenceOnRandomShapes) {
  Random random(20);
  for (int i = 0; i < 120; ++i) {
    OpCase c = conv_case(random, random_geometry(random), random.coin());
    add_random_epilogue(random, c);
    SCOPED_TRACE(describe(c));
    check_fast_strategy(c, "implicit");
    if (HasFailure()) return;
  }
}

TEST(Conv2dImplicit, AgreesWithTheReferenceInGroups) {
  Random random(21);
  for (int i = 0; i < 50; ++i) {
    Geometry g = random_geometry(random);
    g.groups = random.integer(2, 5);
    g.c = g.groups * random.integer(1, 9);
    g.out_c = g.groups * random.integer(1, 20);
    OpCase c = conv_case(random, g, random.coin());
    add_random_epilogue(random, c);
    SCOPED_TRACE(describe(c));
    check_fast_strategy(c, "implicit");
    if (HasFailure()) return;
  }
}

// Enough rows and columns for several strips and groups of panels.
TEST(Conv2dImplicit, AgreesWithTheReferenceOnManyTasks) {
  Random random(22);
  for (const Geometry& g :
       {Geometry{.n = 2,
       .c = 3,
       .h = 45,
       .w = 43,
       .out_c = 40,
       .kernel = {7, 7},
       .stride = {2, 2},
       .padding = {3, 3, 3, 3}},
        Geometry{.c = 24, .h = 29, .w = 31, .out_c = 144},
        Geometry{.c = 40, .h = 23, .w = 23, .out_c = 72, .kernel = {3, 3}, .padding = {1, 1, 1, 1}},
        Geometry{.c = 3, .h = 64, .w = 64, .out_c = 100, .kernel = {16, 16}, .stride = {16, 16}},
        Geometry{.c = 200, .h = 7, .w = 7, .out_c = 300}}) {
    OpCase c = conv_case(random, g, true);
    add_random_epilogue(random, c);
    SCOPED_TRACE(describe(c));
    check_fast_strategy(c, "implicit");
  }
}

TEST(Conv2dDepthwise, AgreesWithTheReferenceOnRandomShapes) {
  constexpr std::array<std::int64_t, 11> kChannels = {2, 3, 5, 8, 15, 16, 17, 31, 33, 64, 100};
  constexpr std::array<std::int64_t, 5> kKernels = {1, 2, 3, 5, 7};
  Random random(28);
  for (int i = 0; i < 120; ++i) {
    Geometry g = random_geometry(random);
    g.c = random.pick(kChannels);
    g.groups = g.c;
    g.out_c = g.c * (random.coin() ? 1 : random.integer(2, 3));
    g.kernel = {random.pick(kKernels), random.pick(kKernels)};
    if (random.coin()) g.dilation = {1, 1};
    g.h = random.integer(1, 9) + (g.kernel[0] - 1) * g.dilation[0];
    g.w = random.integer(1, 31) + (g.kernel[1] - 1) * g.dilation[1];
    OpCase c = conv_case(random, g, random.coin());
    add_random_epilogue(random, c);
    SCOPED_TRACE(describe(c));
    check_fast_strategy(c, "depthwise");
    if (HasFailure()) return;
  }
}

// The shapes that published networks use most.
TEST(Conv2dDepthwise, AgreesWithTheReferenceOnUsualShapes) {
  Random random(29);
  for (const std::int64_t size : {3, 7, 14, 20}) {
    for (const auto& [kernel, stride] :
         {std::pair<std::int64_t, std::int64_t>{3, 1}, {3, 2}, {5, 1}, {5, 2}, {7, 1}}) {
      for (const std::int64_t channels : {16, 40, 256}) {
        const std::int64_t pad = kernel / 2;
        const Geometry g{.c = channels,
                         .h = size,
                         .w = size,
                         .out_c = channels,
                         .kernel = {kernel, kernel},
                         .stride = {stride, stride},
                         .padding = {pad, pad, pad, pad},
                         .groups = channels};
        OpCase c = conv_case(random, g, true);
        add_random_epilogue(random, c);
        SCOPED_TRACE(describe(c));
        check_fast_strategy(c, "depthwise");
      }
    }
  }
}

TEST(Conv2dDepthwise3, AgreesWithTheReferenceOnRandomShapes) {
  constexpr std::array<std::int64_t, 8> kChannels = {16, 17, 24, 31, 40, 100, 176, 330};
  Random random(31);
  for (int i = 0; i < 80; ++i) {
    Geometry g{.n = random.integer(1, 2), .c = random.pick(kChannels), .kernel = {3, 3}};
    g.groups = g.out_c = g.c;
    const std::int64_t stride = random.integer(1, 2);
    g.stride = {stride, stride};
    g.h = random.integer(3, 24);
    g.w = random.integer(3, 24);
    for (auto& side : g.padding) side = random.coin() ? 1 : random.integer(0, 3);
    OpCase c = conv_case(random, g, random.coin());
    add_random_epilogue(random, c);
    if (!refusal(c, "depthwise3").empty()) continue;
    SCOPED_TRACE(describe(c));
    check_fast_strategy(c, "depthwise3");
    if (HasFailure()) return;
  }
}

TEST(Conv2dDepthwise3, RefusesOtherWindows) {
  Random random(32);
  const Geometry good{.c = 32, .h = 9, .w = 9, .out_c = 32, .kernel = {3, 3}, .groups = 32};
  const auto refused = [&](auto change) {
    Geometry g = good;
    change(g);
    return !refusal(conv_case(random, g, false), "depthwise3").empty();
  };
  EXPECT_FALSE(refused([](Geometry&) {}));
  EXPECT_TRUE(refused([](Geometry& g) { g.kernel = {3, 5}; }));
  EXPECT_TRUE(refused([](Geometry& g) { g.stride = {1, 2}; }));
  EXPECT_TRUE(refused([](Geometry& g) { g.stride = {3, 3}; }));
  EXPECT_TRUE(refused([](Geometry& g) { g.dilation = {2, 2}; }));
  EXPECT_TRUE(refused([](Geometry& g) { g.groups = 16; }));
  EXPECT_TRUE(refused([](Geometry& g) { g.out_c = 64; }));
  EXPECT_TRUE(refused([](Geometry& g) { g.c = g.groups = g.out_c = 8; }));
  EXPECT_TRUE(refused([](Geometry& g) { g.w = 7; }));  // 5 wide: no sum of threes and fours
}

TEST(Conv2dDepthwise, RefusesWhatIsNotDepthwise) {
  Random random(30);
  EXPECT_NE(refusal(conv_case(random, {.c = 4, .out_c = 4, .groups = 2}, false), "depthwise"), "");
  EXPECT_NE(refusal(conv_case(random, {.c = 1, .out_c = 4}, false), "depthwise"), "");
  EXPECT_EQ(refusal(conv_case(random, {.c = 4, .out_c = 8, .groups = 4}, false), "depthwise"), "");
}

// Every strategy of direct sums that takes a case, on every target. (conv2d_winograd_test.cc has
// what holds for the others.)
template <typename Body>
void on_every_strategy(OpCase c, const Body& body) {
  c.direct_sums = true;
  for (const std::string& strategy : strategy_names("conv2d")) {
    if (!refusal(c, strategy).empty()) continue;
    SCOPED_TRACE(strategy);
    on_every_target([&] { body(strategy); });
  }
}

Geometry same_3x3(std::int64_t c, std::int64_t out_c, std::int64_t groups = 1) {
  return {.c = c,
          .h = 11,
          .w = 13,
          .out_c = out_c,
          .kernel = {3, 3},
          .padding = {1, 1, 1, 1},
          .groups = groups};
}

TEST(Conv2d, ImpulseReturnsTheFilter) {
  Random random(23);
  for (const Geometry& g : {same_3x3(2, 5), same_3x3(20, 18), same_3x3(6, 6, 6)}) {
    OpCase c = conv_case(random, g, false);
    const std::int64_t channel = g.groups == 1 ? 1 : 0;
    Tensor impulse(c.inputs[0].shape());
    impulse.mutable_data()[(channel * g.h + 5) * g.w + 6] = 1.0F;
    c.inputs = {impulse};
    on_every_strategy(c, [&](const std::string& strategy) {
      const Tensor y = run_op(c, strategy);
      const Tensor& weight = c.weights["weight"];
      for (std::int64_t u = 0; u < 3; ++u) {
        for (std::int64_t v = 0; v < 3; ++v) {
          // A correlation shows its filter turned by half a turn.
          EXPECT_EQ(y.data()[(6 - u) * g.w + 7 - v],
                    weight.data()[(channel % (g.c / g.groups)) * 9 + u * 3 + v]);
        }
      }
      double sum = 0.0;
      for (std::int64_t i = 0; i < g.h * g.w; ++i) sum += y.data()[i] != 0.0F ? 1.0 : 0.0;
      EXPECT_LE(sum, 9.0);
    });
  }
}

TEST(Conv2d, IsLinear) {
  Random random(24);
  for (const Geometry& g : {same_3x3(17, 33), same_3x3(16, 16, 16), same_3x3(8, 24, 2)}) {
    OpCase c = conv_case(random, g, false);
    const Tensor x1 = c.inputs[0];
    const Tensor x2 = random.tensor(x1.shape());
    Tensor mixed(x1.shape());
    for (std::int64_t i = 0; i < mixed.elements(); ++i) {
      mixed.mutable_data()[i] = 2.0F * x1.data()[i] - 0.5F * x2.data()[i];
    }
    on_every_strategy(c, [&](const std::string& strategy) {
      const auto run = [&](const Tensor& x) {
        c.inputs = {x};
        return run_op(c, strategy);
      };
      const Tensor y1 = run(x1);
      const Tensor y2 = run(x2);
      Tensor expected(y1.shape());
      for (std::int64_t i = 0; i < expected.elements(); ++i) {
        expected.mutable_data()[i] = 2.0F * y1.data()[i] - 0.5F * y2.data()[i];
      }
      expect_close(run(mixed), expected, op_cost(c).reduction);
    });
  }
}

TEST(Conv2d, ShiftsWithItsInputAwayFromBorders) {
  Random random(25);
  for (const Geometry& g : {same_3x3(3, 20), same_3x3(17, 33), same_3x3(16, 16, 16)}) {
    OpCase c = conv_case(random, g, true);
    const Tensor x = c.inputs[0];
    Tensor shifted(x.shape());
    for (std::int64_t plane = 0; plane < g.c; ++plane) {
      for (std::int64_t i = 2; i < g.h; ++i) {
        for (std::int64_t j = 3; j < g.w; ++j) {
          shifted.mutable_data()[(plane * g.h + i) * g.w + j] =
              x.data()[(plane * g.h + i - 2) * g.w + j - 3];
        }
      }
    }
    on_every_strategy(c, [&](const std::string& strategy) {
      c.inputs = {x};
      const Tensor y = run_op(c, strategy);
      c.inputs = {shifted};
      const Tensor z = run_op(c, strategy);
      for (std::int64_t plane = 0; plane < g.out_c; ++plane) {
        for (std::int64_t i = 3; i < g.h - 1; ++i) {
          for (std::int64_t j = 4; j < g.w - 1; ++j) {
            // Each value is one sum in one order wherever it stands.
            ASSERT_EQ(z.data()[(plane * g.h + i) * g.w + j],
                      y.data()[(plane * g.h + i - 2) * g.w + j - 3]);
          }
        }
      }
    });
  }
}

TEST(Conv2d, NanAndInfinityReachEveryWindowThatSeesThem) {
  constexpr float kNan = std::numeric_limits<float>::quiet_NaN();
  Random random(26);
  for (const Geometry& g : {same_3x3(17, 33), same_3x3(3, 20), same_3x3(16, 16, 16)}) {
    for (const auto kind : {ops::ActivationKind::kNone, ops::ActivationKind::kRelu,
                            ops::ActivationKind::kRelu6, ops::ActivationKind::kGelu}) {
      OpCase c = conv_case(random, g, true);
      c.activation.kind = kind;
      c.inputs[0].mutable_data()[5 * g.w + 6] = kNan;
      on_every_strategy(c, [&](const std::string& strategy) {
        const Tensor y = run_op(c, strategy);
        for (std::int64_t i = 0; i < g.h; ++i) {
          for (std::int64_t j = 0; j < g.w; ++j) {
            const bool near = std::abs(i - 5) <= 1 && std::abs(j - 6) <= 1;
            ASSERT_EQ(std::isnan(y.data()[i * g.w + j]), near) << i << ", " << j;
          }
        }
      });
    }
  }
}

TEST(Conv2d, AgreesWithATableByScipy) {
  const Tensor x({2, 3, 6, 7}, {std::begin(kCorrelationImage), std::end(kCorrelationImage)});
  OpCase c{.op = "conv2d", .inputs = {x}};
  c.attributes.set("kernel_size", Integers{3, 2});
  c.weights["weight"] =
      Tensor({4, 3, 3, 2}, {std::begin(kCorrelationWeight), std::end(kCorrelationWeight)});
  const Tensor expected({2, 4, 4, 6}, {std::begin(kCorrelation), std::end(kCorrelation)});
  on_every_strategy(
      c, [&](const std::string& strategy) { expect_same_bits(run_op(c, strategy), expected); });
}

TEST(Conv2d, BoxBlurIsTheMeanOfNineNeighbours) {
  Random random(27);
  OpCase c{.op = "conv2d", .inputs = {random.tensor({1, 1, 9, 8})}};
  c.attributes.set("kernel_size", std::int64_t{3});
  Tensor weight(Shape{1, 1, 3, 3});
  for (int i = 0; i < 9; ++i) weight.mutable_data()[i] = 1.0F / 9.0F;
  c.weights["weight"] = weight;
  Tensor expected(Shape{1, 1, 7, 6});
  for (std::int64_t i = 0; i < 7; ++i) {
    for (std::int64_t j = 0; j < 6; ++j) {
      double sum = 0.0;
      for (std::int64_t k = 0; k < 9; ++k) {
        sum += static_cast<double>(c.inputs[0].data()[(i + k / 3) * 8 + j + k % 3]);
      }
      expected.mutable_data()[i * 6 + j] = static_cast<float>(sum / 9.0);
    }
  }
  on_every_strategy(
      c, [&](const std::string& strategy) { expect_close(run_op(c, strategy), expected, 9); });
}

}  // namespace
}  // namespace leadsman::testing
