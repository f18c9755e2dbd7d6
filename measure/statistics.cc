#include "leadsman/statistics.h"

#include <algorithm>
#include <cassert>
#include <cmath>
#include <cstdio>
#include <numbers>

namespace leadsman {
namespace {

double median(std::span<const double> values) {
  return quantile(values, 0.5);
}

// SplitMix64 (Steele, Lea & Flood 2014): the same numbers on every machine.
class Random {
 public:
  explicit Random(std::uint64_t seed) : state_(seed) {}
  std::size_t below(std::size_t limit) {
    std::uint64_t z = (state_ += 0x9E3779B97F4A7C15U);
    z = (z ^ (z >> 30)) * 0xBF58476D1CE4E5B9U;
    z = (z ^ (z >> 27)) * 0x94D049BB133111EBU;
    return static_cast<std::size_t>((z ^ (z >> 31)) % limit);
  }

 private:
  std::uint64_t state_;
};

double resampled_median(std::span<const double> values, Random& random,
                        std::vector<double>& scratch) {
  scratch.clear();
  for (std::size_t i = 0; i < values.size(); ++i) {
    scratch.push_back(values[random.below(values.size())]);
  }
  return median(scratch);
}

// P(|T| <= t): a finite series in the cosine of theta for whole degrees of freedom.
double student_within(double t, int freedom) {
  const double theta = std::atan(t / std::sqrt(freedom));
  const double cosine = std::cos(theta);
  const bool odd = freedom % 2 == 1;
  double term = odd ? cosine : 1.0;
  double sum = freedom == 1 ? 0.0 : term;
  for (int k = odd ? 3 : 2; k <= freedom - 2; k += 2) {
    term *= cosine * cosine * (k - 1) / k;
    sum += term;
  }
  return odd ? 2.0 / std::numbers::pi * (theta + std::sin(theta) * sum) : std::sin(theta) * sum;
}

std::string percent(const char* format, double fraction) {
  char text[96];
  std::snprintf(text, sizeof text, format, 100.0 * fraction);
  return text;
}

}  // namespace

double quantile(std::span<const double> values, double q) {
  assert(!values.empty() && q >= 0.0 && q <= 1.0);
  std::vector<double> sorted(values.begin(), values.end());
  std::ranges::sort(sorted);
  const double place = q * static_cast<double>(sorted.size() - 1);
  const auto below = static_cast<std::size_t>(place);
  const std::size_t above = std::min(below + 1, sorted.size() - 1);
  return sorted[below] + (place - static_cast<double>(below)) * (sorted[above] - sorted[below]);
}

Interval bootstrap_median_ratio(std::span<const double> a, std::span<const double> b,
                                double confidence, int resamples, std::uint64_t seed) {
  assert(!a.empty() && !b.empty() && resamples > 0);
  Random random(seed);
  std::vector<double> scratch;
  std::vector<double> ratios;
  for (int i = 0; i < resamples; ++i) {
    const double above = resampled_median(a, random, scratch);
    ratios.push_back(above / resampled_median(b, random, scratch));
  }
  const double tail = 0.5 * (1.0 - confidence);
  return {quantile(ratios, tail), quantile(ratios, 1.0 - tail)};
}

double student_t(double confidence, int freedom) {
  assert(confidence > 0.0 && confidence < 1.0 && freedom >= 1);
  double low = 0.0;
  double high = 1.0;
  while (student_within(high, freedom) < confidence) high *= 2.0;
  for (int i = 0; i < 100; ++i) {
    const double middle = 0.5 * (low + high);
    (student_within(middle, freedom) < confidence ? low : high) = middle;
  }
  return 0.5 * (low + high);
}

std::string unstable_reason(std::span<const double> seconds) {
  if (seconds.size() < 5) return "fewer than 5 runs";
  const double middle = median(seconds);
  const double tail = quantile(seconds, 0.9) / middle - 1.0;
  if (tail > 0.10) return percent("p90 lies %.0f %% above the median", tail);
  const std::size_t half = seconds.size() / 2;
  const double drift = median(seconds.last(half)) / median(seconds.first(half)) - 1.0;
  if (std::abs(drift) > 0.05) return percent("the median drifts by %+.0f %%", drift);
  return "";
}

bool warmed_up(std::span<const double> seconds) {
  if (seconds.size() < 3) return false;
  const auto [least, most] = std::ranges::minmax(seconds.last(3));
  return most <= 1.05 * least;
}

}  // namespace leadsman
