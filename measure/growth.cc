#include "leadsman/growth.h"

#include <algorithm>
#include <cmath>
#include <limits>

#include "leadsman/error.h"

namespace leadsman {
namespace {

void check_points(std::span<const double> x, std::span<const double> y) {
  if (x.size() != y.size() || x.size() < 3) throw_usage("a growth law needs 3 points or more");
  const auto positive = [](double value) { return value > 0.0 && std::isfinite(value); };
  if (!std::ranges::all_of(x, positive) || !std::ranges::all_of(y, positive)) {
    throw_usage("a growth law needs positive values");
  }
}

}  // namespace

PowerLaw fit_power(std::span<const double> x, std::span<const double> y) {
  check_points(x, y);
  const auto count = static_cast<double>(x.size());
  PowerLaw law;
  law.points = static_cast<int>(x.size());
  double mean_log_y = 0.0;
  for (std::size_t i = 0; i < x.size(); ++i) {
    law.mean_log_x += std::log(x[i]) / count;
    mean_log_y += std::log(y[i]) / count;
  }
  double products = 0.0;
  for (std::size_t i = 0; i < x.size(); ++i) {
    const double distance = std::log(x[i]) - law.mean_log_x;
    law.squares_log_x += distance * distance;
    products += distance * (std::log(y[i]) - mean_log_y);
  }
  if (law.squares_log_x < 1e-12) throw_usage("a growth law needs different sizes");
  law.exponent = products / law.squares_log_x;
  const double intercept = mean_log_y - law.exponent * law.mean_log_x;
  law.coefficient = std::exp(intercept);
  double residuals = 0.0;
  for (std::size_t i = 0; i < x.size(); ++i) {
    const double residual = std::log(y[i]) - intercept - law.exponent * std::log(x[i]);
    residuals += residual * residual;
  }
  law.scatter = std::sqrt(residuals / (count - 2.0));
  const double half = student_t(0.95, law.points - 2) * law.scatter / std::sqrt(law.squares_log_x);
  law.exponent_interval = {law.exponent - half, law.exponent + half};
  return law;
}

Prediction predict(const PowerLaw& law, double x, double confidence) {
  const double distance = std::log(x) - law.mean_log_x;
  const double middle = std::log(law.coefficient) + law.exponent * std::log(x);
  const double half = student_t(confidence, law.points - 2) * law.scatter *
                      std::sqrt(1.0 + 1.0 / law.points + distance * distance / law.squares_log_x);
  return {std::exp(middle), {std::exp(middle - half), std::exp(middle + half)}};
}

double TokenLaw::tokens_at_share(double share) const {
  if (quadratic <= 0.0) return std::numeric_limits<double>::infinity();
  return share / (1.0 - share) * linear / quadratic;
}

TokenLaw fit_tokens(std::span<const double> tokens, std::span<const double> y) {
  check_points(tokens, y);
  // Normal equations of (linear * t + quadratic * t^2) / y = 1.
  double tt = 0.0;
  double tq = 0.0;
  double qq = 0.0;
  double t1 = 0.0;
  double q1 = 0.0;
  for (std::size_t i = 0; i < tokens.size(); ++i) {
    const double t = tokens[i] / y[i];
    const double q = tokens[i] * t;
    tt += t * t;
    tq += t * q;
    qq += q * q;
    t1 += t;
    q1 += q;
  }
  const double determinant = tt * qq - tq * tq;
  if (determinant <= 1e-12 * tt * qq) throw_usage("a growth law needs different sizes");
  const TokenLaw law{(t1 * qq - q1 * tq) / determinant, (q1 * tt - t1 * tq) / determinant};
  if (law.linear < 0.0) return {0.0, q1 / qq};
  if (law.quadratic < 0.0) return {t1 / tt, 0.0};
  return law;
}

}  // namespace leadsman
