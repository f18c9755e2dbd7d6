// Cubic interpolation (Keys 1981, equation 4) with a = -0.75, as the reference library has it.
#pragma once

#include <cmath>

namespace leadsman::ops {

/// Weight of a neighbour at `distance`.
inline double keys_cubic(double distance) {
  constexpr double kA = -0.75;
  const double d = std::abs(distance);
  if (d <= 1.0) return ((kA + 2.0) * d - (kA + 3.0)) * d * d + 1.0;
  return d < 2.0 ? ((kA * d - 5.0 * kA) * d + 8.0 * kA) * d - 4.0 * kA : 0.0;
}

}  // namespace leadsman::ops
