// Where the time of a run goes.
#pragma once

#include <cstdint>
#include <vector>

namespace leadsman {

struct StepTime {
  std::int64_t runs = 0;
  double total_seconds = 0.0;
  double best_seconds = 0.0;
};

/// Indexed as Plan::steps(); `whole` is the run from input to output.
struct Profile {
  std::vector<StepTime> steps;
  StepTime whole;
};

}  // namespace leadsman
