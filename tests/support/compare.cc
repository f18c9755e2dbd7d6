#include "tests/support/compare.h"

#include <algorithm>
#include <cmath>
#include <cstring>
#include <limits>

#include <gtest/gtest.h>

namespace leadsman::testing {

double rounding_threshold(std::int64_t reduction, double factor) {
  return (factor * std::sqrt(static_cast<double>(reduction)) + 4.0) * kUnitRoundoff;
}

double rms(const Tensor& tensor) {
  double sum = 0.0;
  for (const float value : tensor.values()) {
    if (std::isfinite(value)) sum += static_cast<double>(value) * static_cast<double>(value);
  }
  const auto count = static_cast<double>(std::max<std::int64_t>(1, tensor.elements()));
  return std::sqrt(sum / count);
}

void expect_close(const Tensor& actual, const Tensor& expected, std::int64_t reduction,
                  double magnitude, double factor) {
  ASSERT_EQ(actual.shape(), expected.shape());
  if (magnitude == 0.0) magnitude = rms(expected);
  const double threshold = rounding_threshold(reduction, factor);
  std::int64_t wrong = 0;
  double worst = 0.0;
  std::int64_t where = 0;
  for (std::int64_t i = 0; i < expected.elements(); ++i) {
    const double a = static_cast<double>(actual.data()[i]);
    const double e = static_cast<double>(expected.data()[i]);
    if ((std::isnan(a) && std::isnan(e)) || a == e) continue;
    // Written so that a NaN or an infinity on one side only counts as wrong.
    const double ratio = std::abs(a - e) / (threshold * std::max(magnitude, std::abs(e)));
    if (ratio <= 1.0) continue;
    ++wrong;
    if (!(ratio <= worst) || wrong == 1) {
      worst = ratio;
      where = i;
    }
  }
  if (wrong == 0) return;
  ADD_FAILURE() << wrong << " of " << expected.elements() << " values of "
                << expected.shape().to_string() << " are too far off; the worst, at " << where
                << ", is " << actual.data()[where] << ", expected " << expected.data()[where]
                << ", " << worst << " times the threshold of " << threshold << " * "
                << std::max(magnitude, std::abs(static_cast<double>(expected.data()[where])));
}

void expect_same_bits(const Tensor& actual, const Tensor& expected) {
  ASSERT_EQ(actual.shape(), expected.shape());
  if (std::memcmp(actual.data(), expected.data(),
                  static_cast<std::size_t>(expected.elements()) * sizeof(float)) == 0) {
    return;
  }
  for (std::int64_t i = 0; i < expected.elements(); ++i) {
    if (std::memcmp(actual.data() + i, expected.data() + i, sizeof(float)) != 0) {
      ADD_FAILURE() << "value " << i << " of " << expected.shape().to_string() << " is "
                    << actual.data()[i] << ", expected the bits of " << expected.data()[i];
      return;
    }
  }
}

double ulp_distance(float actual, double expected) {
  const double a = static_cast<double>(actual);
  if (std::isnan(a) && std::isnan(expected)) return 0.0;
  const auto rounded = static_cast<float>(expected);
  if (!std::isfinite(a) || !std::isfinite(rounded)) {
    return actual == rounded ? 0.0 : std::numeric_limits<double>::infinity();
  }
  const int exponent = rounded == 0.0F ? -126 : std::max(std::ilogb(rounded), -126);
  return std::abs(a - expected) / std::ldexp(1.0, exponent - 23);
}

}  // namespace leadsman::testing
