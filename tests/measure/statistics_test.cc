// Expected figures were computed with NumPy 1.24 (quantile) and SciPy 1.10 (stats.t.ppf); the
// growth law's with numpy.polyfit and scipy.stats.linregress.
#include "leadsman/statistics.h"

#include <array>
#include <cmath>

#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "leadsman/growth.h"

namespace leadsman {
namespace {

const std::vector<double> kTimes{3.5, 1.25, 9.0, 4.0, 2.75, 7.5, 6.0};

TEST(Quantile, IsNumPys) {
  // numpy.quantile([3.5, 1.25, 9, 4, 2.75, 7.5, 6], [0, .1, .25, .5, .9, .99, 1])
  const std::array<std::pair<double, double>, 7> expected{{{0.0, 1.25},
                                                           {0.1, 2.1500000000000004},
                                                           {0.25, 3.125},
                                                           {0.5, 4.0},
                                                           {0.9, 8.100000000000001},
                                                           {0.99, 8.91},
                                                           {1.0, 9.0}}};
  for (const auto& entry : expected) {
    EXPECT_NEAR(quantile(kTimes, entry.first), entry.second, 1e-12) << entry.first;
  }
  EXPECT_EQ(quantile(std::vector<double>{2.0}, 0.99), 2.0);
}

TEST(StudentT, IsSciPys) {
  struct Row {
    double confidence;
    int freedom;
    double t;  // scipy.stats.t.ppf((1 + confidence) / 2, freedom)
  };
  const std::vector<Row> rows{
      {0.5, 1, 1.00000000001},    {0.5, 2, 0.816496580928},   {0.5, 3, 0.764892328081},
      {0.5, 4, 0.740697084091},   {0.5, 7, 0.711141778082},   {0.5, 8, 0.706386612645},
      {0.5, 30, 0.682755691993},  {0.5, 101, 0.676926595956}, {0.95, 1, 12.7062047364},
      {0.95, 2, 4.30265272991},   {0.95, 3, 3.18244630528},   {0.95, 4, 2.7764451052},
      {0.95, 7, 2.36462425101},   {0.95, 8, 2.30600413503},   {0.95, 30, 2.0422724563},
      {0.95, 101, 1.98373100289}, {0.999, 1, 636.619249432},  {0.999, 2, 31.599054577},
      {0.999, 3, 12.9239786366},  {0.999, 4, 8.61030158138},  {0.999, 7, 5.40788252098},
      {0.999, 8, 5.04130543339},  {0.999, 30, 3.645958635},   {0.999, 101, 3.38947487576},
  };
  for (const Row& row : rows) {
    EXPECT_NEAR(student_t(row.confidence, row.freedom), row.t, 1e-8 * row.t)
        << row.confidence << ' ' << row.freedom;
  }
}

TEST(Bootstrap, IsAFunctionOfItsSeedAndHoldsTheRatio) {
  std::vector<double> slow;
  for (const double time : kTimes) slow.push_back(2.0 * time);
  const Interval first = bootstrap_median_ratio(slow, kTimes, 0.95, 2000, 7);
  const Interval again = bootstrap_median_ratio(slow, kTimes, 0.95, 2000, 7);
  EXPECT_EQ(first.low, again.low);
  EXPECT_EQ(first.high, again.high);
  EXPECT_LT(first.low, 2.0);
  EXPECT_GT(first.high, 2.0);
  const Interval wider = bootstrap_median_ratio(slow, kTimes, 0.999, 2000, 7);
  EXPECT_LE(wider.low, first.low);
  EXPECT_GE(wider.high, first.high);
}

TEST(Bootstrap, TellsAShiftFromNone) {
  std::vector<double> before;
  std::vector<double> after;
  for (int i = 0; i < 30; ++i) {
    before.push_back(1.0 + 0.002 * (i * 7 % 30));
    after.push_back(1.1 * before.back());
  }
  EXPECT_GT(bootstrap_median_ratio(after, before, 0.95, 2000, 1).low, 1.0);
  EXPECT_LT(bootstrap_median_ratio(before, after, 0.95, 2000, 1).high, 1.0);
  const Interval same = bootstrap_median_ratio(before, before, 0.95, 2000, 1);
  EXPECT_LE(same.low, 1.0);
  EXPECT_GE(same.high, 1.0);
}

TEST(Stability, RefusesFewWideAndDriftingTimes) {
  EXPECT_EQ(unstable_reason(std::vector<double>(5, 1.0)), "");
  EXPECT_EQ(unstable_reason(std::vector<double>(4, 1.0)), "fewer than 5 runs");
  EXPECT_EQ(unstable_reason(std::vector<double>{1, 1, 1.5, 1, 1.5, 1, 1.5, 1, 1, 1}),
            "p90 lies 50 % above the median");
  EXPECT_EQ(unstable_reason(std::vector<double>{1, 1, 1, 1.06, 1.06, 1.06}),
            "the median drifts by +6 %");
}

TEST(Stability, WarmsUpWhenThreeTimesAgree) {
  EXPECT_FALSE(warmed_up(std::vector<double>{1, 1}));
  EXPECT_FALSE(warmed_up(std::vector<double>{2, 1.2, 1, 1}));
  EXPECT_TRUE(warmed_up(std::vector<double>{2, 1.2, 1, 1, 1.04}));
}

TEST(PowerLaw, FindsAKnownExponent) {
  std::vector<double> x;
  std::vector<double> y;
  for (double size = 96; size <= 384; size += 32) {
    x.push_back(size);
    y.push_back(3e-7 * std::pow(size, 2.25));
  }
  const PowerLaw law = fit_power(x, y);
  EXPECT_NEAR(law.exponent, 2.25, 1e-10);
  EXPECT_NEAR(law.coefficient, 3e-7, 1e-15);
  EXPECT_NEAR(predict(law, 512).value, 3e-7 * std::pow(512, 2.25), 1e-9);
}

TEST(PowerLaw, HasSciPysFitAndInterval) {
  // x, y as below; linregress on logarithms; the interval by its formula with t.ppf(0.975, 4).
  const std::vector<double> x{96, 128, 160, 192, 224, 256};
  const std::vector<double> y{5.1, 8.7, 14.2, 19.6, 28.0, 35.1};
  const PowerLaw law = fit_power(x, y);
  EXPECT_NEAR(law.exponent, 1.99063546318, 1e-9);
  EXPECT_NEAR(std::log(law.coefficient), -7.46874254672, 1e-9);
  EXPECT_NEAR(law.exponent_interval.low, 1.90375620138, 1e-8);
  EXPECT_NEAR(law.exponent_interval.high, 2.07751472499, 1e-8);
  const Prediction next = predict(law, 320);
  EXPECT_NEAR(next.value, 55.3613551864, 1e-7);
  EXPECT_NEAR(next.interval.low, 50.331771686, 1e-6);
  EXPECT_NEAR(next.interval.high, 60.8935379265, 1e-6);
}

TEST(PowerLaw, RefusesWhatHasNoLaw) {
  const std::vector<double> two{1, 2};
  const std::vector<double> alike{2, 2, 2};
  const std::vector<double> good{1, 2, 3};
  const std::vector<double> zero{0, 1, 2};
  EXPECT_THROW(fit_power(two, two), Error);
  EXPECT_THROW(fit_power(alike, good), Error);
  EXPECT_THROW(fit_power(good, zero), Error);
  EXPECT_THROW(fit_tokens(alike, good), Error);
}

TEST(TokenLaw, SplitsLinearFromQuadratic) {
  const std::vector<double> tokens{37, 65, 145, 257, 577};
  std::vector<double> y;
  for (const double t : tokens) y.push_back(2e-5 * t + 4e-8 * t * t);
  const TokenLaw law = fit_tokens(tokens, y);
  EXPECT_NEAR(law.linear, 2e-5, 1e-12);
  EXPECT_NEAR(law.quadratic, 4e-8, 1e-14);
  EXPECT_NEAR(law.tokens_at_share(0.5), 500.0, 1e-4);  // where 4e-8 t = 2e-5
  EXPECT_NEAR(law.tokens_at_share(0.1), 500.0 / 9.0, 1e-5);
}

TEST(TokenLaw, KeepsBothPartsAtZeroOrAbove) {
  const std::vector<double> tokens{10, 20, 40};
  const TokenLaw flat = fit_tokens(tokens, std::vector<double>{10, 18, 30});
  EXPECT_EQ(flat.quadratic, 0.0);
  EXPECT_GT(flat.linear, 0.0);
  EXPECT_TRUE(std::isinf(flat.tokens_at_share(0.1)));
  const TokenLaw steep = fit_tokens(tokens, std::vector<double>{10, 45, 200});
  EXPECT_EQ(steep.linear, 0.0);
  EXPECT_GT(steep.quadratic, 0.0);
}

}  // namespace
}  // namespace leadsman
