// Where the time of a run goes, and what the machine could do.
#pragma once

#include <cstdint>
#include <string>
#include <vector>

namespace leadsman {

struct PartTime {
  std::int64_t runs = 0;
  double total_seconds = 0.0;
  double best_seconds = 0.0;
};

struct Profile {
  std::vector<PartTime> steps;  ///< indexed as Plan::steps()
  PartTime input;               ///< inputs from logical to memory order
  PartTime whole;               ///< from input to output
  /// What a run takes beside input and steps: walking the plan, hooks, reading the clock.
  PartTime plan;
};

/// FLOP/s (two a multiply-add) that `threads` threads reach together in registers, with the
/// instruction set in use: the best of some 20 ms.
double measure_peak(int threads);

/// CPUs that this process may use (affinity mask, containers' quota), at least 1: what `threads =
/// 0` stands for.
int available_cpus();

/// The instruction set in use: "avx512", "avx2", "sse4", "neon" or "portable".
std::string instruction_set();

}  // namespace leadsman
