#include "ops/simd/reduce.h"

#include <cmath>
#include <limits>
#include <vector>

#include <gtest/gtest.h>

#include "tests/support/compare.h"
#include "tests/support/random.h"
#include "tests/support/targets.h"

namespace leadsman::testing {
namespace {

TEST(Reduce, SoftmaxRowAgreesWithDouble) {
  Random random(60);
  for (std::int64_t count = 1; count < 70; ++count) {
    const Tensor x = random.tensor({count}, -20.0, 20.0);
    Tensor expected({count});
    double sum = 0.0;
    for (const float value : x.values()) sum += std::exp(static_cast<double>(value));
    for (std::int64_t i = 0; i < count; ++i) {
      expected.mutable_data()[i] =
          static_cast<float>(std::exp(static_cast<double>(x.data()[i])) / sum);
    }
    on_every_target([&] {
      Tensor y({count});
      ops::simd::softmax_row(x.data(), y.mutable_data(), count);
      // Differences of up to 40 before the exponential.
      expect_close(y, expected, count, 0.0, 40.0);
      Tensor in_place = x;
      ops::simd::softmax_row(in_place.data(), in_place.mutable_data(), count);
      expect_same_bits(in_place, y);
    });
  }
}

TEST(Reduce, SoftmaxRowKeepsNanAndTakesHugeScores) {
  on_every_target([&] {
    std::vector<float> x(37, 3e38F);
    ops::simd::softmax_row(x.data(), x.data(), 37);
    for (const float value : x) EXPECT_FLOAT_EQ(value, 1.0F / 37.0F);
    x[20] = std::numeric_limits<float>::quiet_NaN();
    ops::simd::softmax_row(x.data(), x.data(), 37);
    for (const float value : x) EXPECT_TRUE(std::isnan(value));
  });
}

TEST(Reduce, ColumnMeansAgreeWithDouble) {
  Random random(61);
  for (int i = 0; i < 40; ++i) {
    const std::int64_t rows = random.integer(1, 60);
    const std::int64_t cols = random.integer(1, 40);
    const std::int64_t stride = cols + random.integer(0, 3);
    const Tensor x = random.tensor({rows, stride});
    Tensor expected({cols});
    for (std::int64_t c = 0; c < cols; ++c) {
      double sum = 0.0;
      for (std::int64_t r = 0; r < rows; ++r) {
        sum += static_cast<double>(x.data()[r * stride + c]);
      }
      expected.mutable_data()[c] = static_cast<float>(sum / static_cast<double>(rows));
    }
    on_every_target([&] {
      Tensor y({cols});
      ops::simd::column_means(x.data(), rows, cols, stride, y.mutable_data());
      expect_close(y, expected, rows, 1.0);
    });
  }
}

}  // namespace
}  // namespace leadsman::testing
