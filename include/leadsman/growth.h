// How a measured quantity grows with size: fits, and predictions that say how sure they are.
// All functions are pure and may be called from any thread.
#pragma once

#include <span>

#include "leadsman/statistics.h"

namespace leadsman {

/// y = coefficient * x^exponent, by least squares on logarithms.
struct PowerLaw {
  double coefficient = 0.0;
  double exponent = 0.0;
  Interval exponent_interval;  ///< of 95 %
  double scatter = 0.0;        ///< standard deviation of log y about the line
  int points = 0;
  double mean_log_x = 0.0;
  double squares_log_x = 0.0;  ///< sum of squares of log x about its mean
};

/// Throws Error(kUsage) for fewer than 3 points, x all alike, or values that are not positive.
PowerLaw fit_power(std::span<const double> x, std::span<const double> y);

struct Prediction {
  double value = 0.0;
  Interval interval;
};

/// What one new measurement at `x` will be, with the prediction interval of simple regression
/// (Draper & Smith 1998, 3.1) taken back from logarithms.
Prediction predict(const PowerLaw& law, double x, double confidence = 0.95);

/// y = linear * t + quadratic * t^2, neither below 0: time against tokens. The squares of relative
/// errors are least.
struct TokenLaw {
  double linear = 0.0;
  double quadratic = 0.0;
  /// Tokens at which the quadratic part is `share` (in (0, 1)) of the whole; infinite without one.
  double tokens_at_share(double share) const;
};

/// Throws Error(kUsage) for fewer than 3 points or values that are not positive.
TokenLaw fit_tokens(std::span<const double> tokens, std::span<const double> y);

}  // namespace leadsman
