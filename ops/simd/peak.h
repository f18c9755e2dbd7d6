// The floating-point peak of this machine, as a loop of independent multiply-adds reaches it.
#pragma once

namespace leadsman::ops::simd {

/// Seconds of this thread's processor time for one thread, of the clock on the wall for several.
double now(int threads);

/// FLOP/s of `threads` threads together with the instruction set in use, over some 20 ms.
double measure_peak(int threads);

}  // namespace leadsman::ops::simd
