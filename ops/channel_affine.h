// A map y = factor[c] * x + summand[c] of each channel: what planning folds into the weights of a
// product before it.
#pragma once

#include <vector>

namespace leadsman::ops {

struct ChannelAffine {
  std::vector<double> factor;
  std::vector<double> summand;
};

}  // namespace leadsman::ops
