// What holds for convolutions by minimal filtering: the algebra of their matrices, agreement with
// the reference within the error that the matrices let expect, and where they may be used.
#include <array>
#include <cmath>
#include <limits>

#include <gtest/gtest.h>

#include "ops/conv2d/winograd.h"
#include "tests/ops/conv_case.h"
#include "tests/support/compare.h"
#include "tests/support/fast_against_reference.h"
#include "tests/support/targets.h"

namespace leadsman::testing {
namespace {

using ops::Winograd;

const std::array<std::string, 2> kStrategies{"winograd2", "winograd4"};

double growth(const std::string& strategy) {
  return strategy == "winograd2" ? 1.0 : ops::winograd_growth<4>();
}

Geometry same_3x3(std::int64_t c, std::int64_t out_c, std::int64_t h, std::int64_t w) {
  return {.c = c, .h = h, .w = w, .out_c = out_c, .kernel = {3, 3}, .padding = {1, 1, 1, 1}};
}

// The strategy that takes this case; empty: none.
std::string winograd_strategy(const OpCase& c) {
  for (const std::string& strategy : kStrategies) {
    if (refusal(c, strategy).empty()) return strategy;
  }
  return {};
}

// A^T [(G g) * (B^T d)] is the correlation of d with g: F(m, 3) in one dimension.
template <std::size_t kOutput>
void expect_correlation() {
  using W = Winograd<kOutput>;
  Random random(1);
  for (int round = 0; round < 20; ++round) {
    std::array<double, W::kTile> data;
    std::array<double, 3> filter;
    for (double& x : data) x = random.uniform(-1.0, 1.0);
    for (double& x : filter) x = random.uniform(-1.0, 1.0);
    std::array<double, W::kTile> product{};
    for (std::size_t p = 0; p < W::kTile; ++p) {
      double d = 0.0;
      double g = 0.0;
      for (std::size_t i = 0; i < W::kTile; ++i) d += W::kInput[p][i] * data[i];
      for (std::size_t i = 0; i < 3; ++i) g += W::kFilter[p][i] * filter[i];
      product[p] = d * g;
    }
    for (std::size_t i = 0; i < kOutput; ++i) {
      double y = 0.0;
      for (std::size_t p = 0; p < W::kTile; ++p) y += W::kOutputs[i][p] * product[p];
      double expected = 0.0;
      for (std::size_t k = 0; k < 3; ++k) expected += data[i + k] * filter[k];
      EXPECT_NEAR(y, expected, 1e-13);
    }
  }
}

TEST(Winograd, MatricesComputeACorrelation) {
  expect_correlation<2>();
  expect_correlation<4>();
}

TEST(Winograd, AgreesWithTheReferenceOnRandomShapes) {
  constexpr std::array<std::int64_t, 9> kChannels = {16, 16, 17, 24, 31, 33, 40, 48, 130};
  Random random(40);
  std::map<std::string, int> taken;
  for (int i = 0; i < 80; ++i) {
    const std::int64_t largest = random.coin() ? 22 : 9;  // small images: tiles of 2x2
    Geometry g = same_3x3(random.pick(kChannels), random.pick(kChannels),
                          random.integer(3, largest), random.integer(3, largest));
    g.n = random.integer(1, 2);
    g.groups = random.coin() ? 1 : random.integer(2, 5);
    g.c *= g.groups;
    g.out_c *= g.groups;
    for (auto& side : g.padding) side = random.integer(0, 3);
    OpCase c = conv_case(random, g, random.coin());
    add_random_epilogue(random, c);
    const std::string strategy = winograd_strategy(c);
    if (strategy.empty()) continue;
    ++taken[strategy];
    SCOPED_TRACE(strategy + " " + describe(c));
    check_fast_strategy(c, strategy, 8.0 * growth(strategy));
    if (HasFailure()) return;
  }
  EXPECT_GE(taken["winograd2"], 5);
  EXPECT_GE(taken["winograd4"], 20);
}

// Few tiles and many; one part, several, and several of several groups.
TEST(Winograd, AgreesWithTheReferenceOnUsualShapes) {
  Random random(41);
  const auto grouped = [](Geometry g, std::int64_t groups) {
    g.groups = groups;
    return g;
  };
  for (const auto& [g, strategy] :
       {std::pair<Geometry, std::string>{same_3x3(32, 48, 40, 36), "winograd4"},
        {grouped(same_3x3(72, 72, 28, 28), 3), "winograd4"},
        {grouped(same_3x3(64, 300, 26, 25), 2), "winograd4"},
        {grouped(same_3x3(64, 580, 14, 13), 2), "winograd4"},
        {same_3x3(20, 290, 33, 35), "winograd4"},
        {same_3x3(64, 64, 14, 14), "winograd4"},
        {same_3x3(40, 272, 14, 13), "winograd4"},
        {same_3x3(80, 96, 7, 7), "winograd2"},
        {same_3x3(32, 150, 7, 9), "winograd2"}}) {
    OpCase c = conv_case(random, g, true);
    add_random_epilogue(random, c);
    SCOPED_TRACE(describe(c));
    check_fast_strategy(c, strategy, 8.0 * growth(strategy));
  }
}

double relative_error(const Tensor& actual, const Tensor& expected) {
  double error = 0.0;
  double size = 0.0;
  for (std::int64_t i = 0; i < expected.elements(); ++i) {
    const double e = static_cast<double>(expected.data()[i]);
    error += std::pow(static_cast<double>(actual.data()[i]) - e, 2);
    size += e * e;
  }
  return std::sqrt(error / size);
}

// winograd_growth() is a derivation; this is the measurement.
TEST(Winograd, ErrorsGrowAsTheMatricesTell) {
  Random random(42);
  const auto measured = [&](const Geometry& g, const std::string& strategy) {
    const OpCase c = conv_case(random, g, false);
    const Tensor expected = run_op(c, "reference");
    return relative_error(run_op(c, strategy), expected) /
           relative_error(run_op(c, "implicit"), expected);
  };
  const double two = measured(same_3x3(256, 64, 7, 7), "winograd2");
  const double four = measured(same_3x3(256, 32, 20, 20), "winograd4");
  EXPECT_NEAR(two / ops::winograd_growth<2>(), 1.0, 0.4) << two;
  EXPECT_NEAR(four / ops::winograd_growth<4>(), 1.0, 0.4) << four;
}

TEST(Winograd, NonFiniteValuesReachEveryWindowThatSeesThemAndStayInTheirTiles) {
  Random random(43);
  for (const float value :
       {std::numeric_limits<float>::quiet_NaN(), std::numeric_limits<float>::infinity()}) {
    for (const std::string strategy : {"winograd2", "winograd4"}) {
      const std::int64_t side = strategy == "winograd2" ? 8 : 20;
      const std::int64_t channels = strategy == "winograd2" ? 96 : 32;
      OpCase c = conv_case(random, same_3x3(channels, channels, side, side), true);
      ASSERT_EQ(refusal(c, strategy), "");
      const std::int64_t tile = strategy == "winograd2" ? 2 : 4;
      c.inputs[0].mutable_data()[5 * side + 6] = value;
      on_every_target([&] {
        const Tensor y = run_op(c, strategy);
        for (std::int64_t i = 0; i < side; ++i) {
          for (std::int64_t j = 0; j < side; ++j) {
            const bool near = std::abs(i - 5) <= 1 && std::abs(j - 6) <= 1;
            const bool tile_sees = i / tile * tile - 1 <= 5 && 5 <= i / tile * tile + tile &&
                                   j / tile * tile - 1 <= 6 && 6 <= j / tile * tile + tile;
            const bool finite = std::isfinite(y.data()[i * side + j]);
            ASSERT_TRUE(tile_sees || finite) << i << ", " << j;
            ASSERT_FALSE(near && finite) << i << ", " << j;
          }
        }
      });
    }
  }
}

TEST(Winograd, RefusesWhatItCannotOrShouldNotDo) {
  Random random(44);
  const auto refused = [&](const Geometry& g) {
    return winograd_strategy(conv_case(random, g, false)).empty();
  };
  const Geometry good = same_3x3(32, 32, 20, 20);
  EXPECT_FALSE(refused(good));
  const auto changed = [&](auto change) {
    Geometry g = good;
    change(g);
    return refused(g);
  };
  EXPECT_TRUE(changed([](Geometry& g) { g.stride = {1, 2}; }));
  EXPECT_TRUE(changed([](Geometry& g) { g.dilation = {2, 1}; }));
  EXPECT_TRUE(changed([](Geometry& g) { g.kernel = {3, 1}; }));
  EXPECT_TRUE(changed([](Geometry& g) { g.kernel = {5, 5}; }));
  EXPECT_FALSE(changed([](Geometry& g) { g.groups = 2; }));
  EXPECT_TRUE(changed([](Geometry& g) { g.groups = 4; }));  // of 8 channels
  EXPECT_TRUE(changed([](Geometry& g) { g.c = 3; }));
  EXPECT_TRUE(changed([](Geometry& g) { g.out_c = 15; }));
  EXPECT_TRUE(changed([](Geometry& g) { g.h = g.w = 1; }));

  OpCase exact = conv_case(random, good, false);
  exact.direct_sums = true;
  EXPECT_EQ(winograd_strategy(exact), "");
}

}  // namespace
}  // namespace leadsman::testing
