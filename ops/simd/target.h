// Which instruction set the vector kernels use.
//
// By default the best one that this machine supports. The environment variable LEADSMAN_SIMD
// names another: portable, sse4, avx2, avx512 (x86), neon (Arm). All state is process-wide and
// safe to read from several threads; forcing a target while kernels run is not.
#pragma once

#include <string>
#include <string_view>
#include <vector>

namespace leadsman::ops::simd {

/// Names of the instruction sets that this build has code for and this machine supports, best
/// first; never empty.
std::vector<std::string> supported_targets();

/// Obeys LEADSMAN_SIMD, once; every strategy of vector kernels calls it when it prepares. Throws
/// Error(kUsage) naming the supported targets when the variable holds none of them.
void choose_target();

/// From now on kernels use `name`. Throws Error(kUsage) when it is unknown or unsupported.
void force_target(std::string_view name);

/// The instruction set of the code that runs: told by that code itself.
std::string_view target_in_use();

/// Forces a target and goes back to the one before at the end of the scope; for tests.
class ForcedTarget {
 public:
  explicit ForcedTarget(std::string_view name) : before_(target_in_use()) { force_target(name); }
  ~ForcedTarget() { force_target(before_); }
  ForcedTarget(const ForcedTarget&) = delete;
  ForcedTarget& operator=(const ForcedTarget&) = delete;

 private:
  std::string before_;
};

}  // namespace leadsman::ops::simd
