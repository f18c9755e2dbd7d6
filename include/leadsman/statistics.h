// Statistics of measured times. All functions are pure and may be called from any thread.
#pragma once

#include <cstdint>
#include <span>
#include <string>
#include <vector>

namespace leadsman {

/// Quantile q in [0, 1], linear between order statistics (Hyndman & Fan 1996, type 7: NumPy's
/// default). Requires at least one value.
double quantile(std::span<const double> values, double q);

struct Interval {
  double low = 0.0;
  double high = 0.0;
};

/// Percentile bootstrap (Efron & Tibshirani 1993, chapter 13) of median(a) / median(b): the middle
/// `confidence` of `resamples` ratios. A function of its arguments, `seed` among them. Requires
/// values on both sides.
Interval bootstrap_median_ratio(std::span<const double> a, std::span<const double> b,
                                double confidence, int resamples, std::uint64_t seed);

/// t with P(|T| <= t) = confidence for Student's distribution with `freedom` >= 1 degrees
/// (Abramowitz & Stegun 1964, 26.7.3 and 26.7.4, inverted by bisection); confidence in (0, 1).
double student_t(double confidence, int freedom);

/// Why times, in the order they were taken, must not be called stable; empty when they may:
/// at least 5 of them, p90 within 10 % of the median, the medians of both halves within 5 %.
std::string unstable_reason(std::span<const double> seconds);

/// True when the last 3 of `seconds` lie within 5 % of each other: warmed up.
bool warmed_up(std::span<const double> seconds);

}  // namespace leadsman
