// The instruction sets worth a copy of every vector kernel. Included before any header of Highway.
//
// On x86 SSE4, AVX2 and AVX-512 (SSSE3 adds nothing for floats) beside the portable baseline. On
// Arm NEON; vectors of a length unknown at compile time (SVE) cannot form the register tiles of
// the matrix kernel.
#pragma once

#undef HWY_DISABLED_TARGETS
#define HWY_DISABLED_TARGETS (HWY_SSSE3 | HWY_SVE | HWY_SVE2 | HWY_SVE_256 | HWY_SVE2_128)
