#include "ops/simd/activation.h"

#include <array>
#include <cmath>
#include <iterator>
#include <limits>
#include <map>
#include <numbers>
#include <vector>

#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "tests/ops/tables.h"
#include "tests/support/compare.h"
#include "tests/support/fast_against_reference.h"
#include "tests/support/op_runner.h"
#include "tests/support/random.h"
#include "tests/support/targets.h"

namespace leadsman::testing {
namespace {

using ops::ActivationKind;

constexpr std::array kKinds = {
    ActivationKind::kRelu,    ActivationKind::kRelu6,       ActivationKind::kLeakyRelu,
    ActivationKind::kGelu,    ActivationKind::kGeluTanh,    ActivationKind::kSilu,
    ActivationKind::kSigmoid, ActivationKind::kHardSigmoid, ActivationKind::kHardSwish,
    ActivationKind::kTanh,    ActivationKind::kElu,         ActivationKind::kSoftplus,
    ActivationKind::kMish,    ActivationKind::kQuickGelu};

// The exact value, in double, without the cancellation of 1 + tanh far below zero.
double exact(ops::Activation activation, double x) {
  if (activation.kind != ActivationKind::kGeluTanh) return ops::activate(activation, x);
  return x /
         (1.0 + std::exp(-2.0 * std::sqrt(2.0 / std::numbers::pi) * (x + 0.044715 * x * x * x)));
}

// The largest error in ulp over [-12, 12] and around 0. Values below 2^-20 in size count in the
// units of 2^-20: nothing adds up such tails to where their last digits matter.
double largest_error(ops::Activation activation) {
  std::vector<float> x;
  for (int i = -240000; i <= 240000; ++i) x.push_back(static_cast<float>(i) * 5e-5F);
  for (int exponent = -30; exponent < -3; ++exponent) {
    for (const float sign : {-1.0F, 1.0F}) x.push_back(std::ldexp(sign * 1.37F, exponent));
  }
  std::vector<float> y(x.size());
  ops::simd::activate_row(activation, x.data(), y.data(), static_cast<std::int64_t>(x.size()));
  double largest = 0.0;
  for (std::size_t i = 0; i < x.size(); ++i) {
    const double expected = exact(activation, static_cast<double>(x[i]));
    const bool tail = std::abs(x[i]) > 1.0F && std::abs(expected) < 0x1p-20;
    const double error = tail ? std::abs(static_cast<double>(y[i]) - expected) / 0x1p-43
                              : ulp_distance(y[i], expected);
    largest = std::max(largest, error);
  }
  return largest;
}

// What activation.h states: ulp with fused multiply-add, and without.
const std::map<ActivationKind, std::array<double, 2>> kStatedErrors = {
    {ActivationKind::kRelu, {0.0, 0.0}},       {ActivationKind::kRelu6, {0.0, 0.0}},
    {ActivationKind::kLeakyRelu, {0.5, 0.5}},  {ActivationKind::kGelu, {6.0, 12.0}},
    {ActivationKind::kGeluTanh, {20.0, 24.0}}, {ActivationKind::kSilu, {2.0, 2.0}},
    {ActivationKind::kSigmoid, {2.0, 2.0}},    {ActivationKind::kHardSigmoid, {1.0, 1.0}},
    {ActivationKind::kHardSwish, {2.0, 2.0}},  {ActivationKind::kTanh, {1.5, 1.5}},
    {ActivationKind::kElu, {1.0, 1.0}},        {ActivationKind::kSoftplus, {3.0, 3.0}},
    {ActivationKind::kMish, {4.5, 4.5}},       {ActivationKind::kQuickGelu, {13.0, 13.0}},
};

TEST(Activation, ErrorsAreWithinThoseStated) {
  for (const ActivationKind kind : kKinds) {
    SCOPED_TRACE(ops::activation_name(kind));
    on_every_target([&] {
      const std::string_view target = ops::simd::target_in_use();
      const bool fused = target == "avx2" || target == "avx512" || target == "neon";
      const double error = largest_error({kind, 0.125F});
      RecordProperty(std::string(target) + "_" + std::string(ops::activation_name(kind)),
                     std::to_string(error));
      EXPECT_LE(error, kStatedErrors.at(kind)[fused ? 0 : 1]);
    });
  }
}

TEST(Activation, GeluAgreesWithATableByScipy) {
  static_assert(std::size(kGelu) == std::size(kGeluInput));
  constexpr auto kCount = static_cast<std::int64_t>(std::size(kGelu));
  on_every_target([&] {
    std::array<float, std::size(kGelu)> y{};
    ops::simd::activate_row({ActivationKind::kGelu, 0.0F}, kGeluInput, y.data(), kCount);
    for (std::size_t i = 0; i < y.size(); ++i) {
      const double size = std::max(std::abs(kGelu[i]), 1e-8);
      EXPECT_NEAR(static_cast<double>(y[i]), kGelu[i], 8 * kUnitRoundoff * size) << kGeluInput[i];
    }
  });
  for (std::size_t i = 0; i < std::size(kGelu); ++i) {
    const double y =
        ops::activate({ActivationKind::kGelu, 0.0F}, static_cast<double>(kGeluInput[i]));
    EXPECT_NEAR(y, kGelu[i], 4e-16 * std::max(1.0, std::abs(kGelu[i])));
  }
}

TEST(Activation, NanAndInfinitiesGiveWhatThePlainFormGives) {
  constexpr float kNan = std::numeric_limits<float>::quiet_NaN();
  constexpr float kInf = std::numeric_limits<float>::infinity();
  constexpr float kMax = std::numeric_limits<float>::max();
  const std::array<float, 9> x = {kNan, kInf, -kInf, kMax, -kMax, 0.0F, -0.0F, 100.0F, -100.0F};
  for (const ActivationKind kind : kKinds) {
    SCOPED_TRACE(ops::activation_name(kind));
    on_every_target([&] {
      std::array<float, 9> y{};
      ops::simd::activate_row({kind, 0.125F}, x.data(), y.data(), 9);
      for (std::size_t i = 0; i < x.size(); ++i) {
        const double expected = ops::activate({kind, 0.125F}, static_cast<double>(x[i]));
        if (std::isnan(expected) || std::isinf(static_cast<float>(expected))) {
          EXPECT_EQ(ulp_distance(y[i], expected), 0.0) << x[i] << " gives " << y[i];
        } else {
          EXPECT_NEAR(static_cast<double>(y[i]), expected, 1e-6 * std::max(1.0, std::abs(expected)))
              << x[i];
        }
      }
    });
  }
}

TEST(Activation, ExponentialIsWithinOneUlpAndUnderflowsToZero) {
  std::vector<float> x;
  for (int i = -90000; i <= 89000; ++i) x.push_back(static_cast<float>(i) * 1e-3F);
  std::vector<float> y(x.size());
  on_every_target([&] {
    ops::simd::exponential_row(x.data(), y.data(), static_cast<std::int64_t>(x.size()));
    double largest = 0.0;
    for (std::size_t i = 0; i < x.size(); ++i) {
      largest = std::max(largest, ulp_distance(y[i], std::exp(static_cast<double>(x[i]))));
    }
    EXPECT_LE(largest, 1.0);
    RecordProperty(std::string(ops::simd::target_in_use()) + "_exp", std::to_string(largest));
    const std::array<float, 3> ends = {-200.0F, 90.0F, -std::numeric_limits<float>::infinity()};
    std::array<float, 3> at_ends{};
    ops::simd::exponential_row(ends.data(), at_ends.data(), 3);
    EXPECT_EQ(at_ends[0], 0.0F);
    EXPECT_EQ(at_ends[1], std::numeric_limits<float>::infinity());
    EXPECT_EQ(at_ends[2], 0.0F);
  });
}

TEST(ActivationVector, AgreesWithTheReferenceAndRunsInPlace) {
  Random random(50);
  for (const ActivationKind kind : kKinds) {
    for (const Shape& shape : {Shape{1, 9}, Shape{2, 7, 31}, Shape{1, 3, 90, 91}}) {
      OpCase c{.op = "activation", .inputs = {random.tensor(shape, -8.0, 8.0)}};
      c.attributes.set("kind", std::string(ops::activation_name(kind)));
      SCOPED_TRACE(std::string(ops::activation_name(kind)) + " " + shape.to_string());
      check_fast_strategy(c, "vector");
      on_every_target([&] {
        expect_same_bits(run_op(c, "vector", {.threads = 2, .in_place = true}),
                         run_op(c, "vector"));
      });
    }
  }
}

TEST(Activation, LeakyReluTakesItsSlopeFromTheAttributes) {
  OpCase c{.op = "activation", .inputs = {Tensor({1, 2}, {-8.0F, 8.0F})}};
  c.attributes.set("kind", std::string("leaky_relu"));
  EXPECT_FLOAT_EQ(run_op(c, "vector").data()[0], -0.08F);
  c.attributes.set("slope", 0.5);
  for (const std::string& strategy : strategy_names("activation")) {
    EXPECT_EQ(run_op(c, strategy).data()[0], -4.0F);
    EXPECT_EQ(run_op(c, strategy).data()[1], 8.0F);
  }
  c.attributes.set("kind", std::string("swish"));
  EXPECT_THROW(run_op(c, "vector"), Error);
}

TEST(Activation, EluTakesItsAlphaFromTheAttributes) {
  OpCase c{.op = "activation", .inputs = {Tensor({1, 2}, {-100.0F, 8.0F})}};
  c.attributes.set("kind", std::string("elu"));
  c.attributes.set("slope", 3.0);  // of leaky_relu alone
  for (const std::string& strategy : strategy_names("activation")) {
    EXPECT_EQ(run_op(c, strategy).data()[0], -1.0F);
  }
  c.attributes.set("alpha", 0.5);
  for (const std::string& strategy : strategy_names("activation")) {
    EXPECT_EQ(run_op(c, strategy).data()[0], -0.5F);
    EXPECT_EQ(run_op(c, strategy).data()[1], 8.0F);
  }
}

}  // namespace
}  // namespace leadsman::testing
