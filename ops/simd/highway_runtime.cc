// What libhwy gives to run-time dispatch, for binaries that cannot link it: Debian ships libhwy as
// a shared library only, and a board's binary is static. Built only with LEADSMAN_HIGHWAY_RUNTIME.
//
// On 64-bit Arm there is nothing to detect: wanted_targets.h asks for NEON alone, which the
// architecture always has. (libhwy 1.0.3 asks for the AES instructions as well, which no kernel
// here uses and which common boards - Raspberry Pi 3 and 4, from memory - lack.)
#ifdef LEADSMAN_HIGHWAY_RUNTIME

#ifndef __aarch64__
#error "LEADSMAN_HIGHWAY_RUNTIME is for 64-bit Arm; link libhwy elsewhere"
#endif

#include <cstdarg>
#include <cstdio>
#include <cstdlib>

#include "hwy/base.h"
#include "hwy/targets.h"
#include "ops/simd/wanted_targets.h"

namespace hwy {

std::int64_t SupportedTargets() {
  return HWY_NEON;
}

ChosenTarget& GetChosenTarget() {
  static ChosenTarget chosen;
  return chosen;
}

void Abort(const char* file, int line, const char* format, ...) {
  va_list arguments;
  va_start(arguments, format);
  std::fprintf(stderr, "%s:%d: ", file, line);
  std::vfprintf(stderr, format, arguments);
  std::fputc('\n', stderr);
  va_end(arguments);
  std::abort();
}

}  // namespace hwy

#endif  // LEADSMAN_HIGHWAY_RUNTIME
