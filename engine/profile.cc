#include "leadsman/profile.h"

#include "ops/simd/peak.h"
#include "ops/simd/target.h"

namespace leadsman {

double measure_peak(int threads) {
  ops::simd::choose_target();
  return ops::simd::measure_peak(threads);
}

std::string instruction_set() {
  ops::simd::choose_target();
  return std::string(ops::simd::target_in_use());
}

}  // namespace leadsman
