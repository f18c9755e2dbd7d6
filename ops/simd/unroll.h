// LEADSMAN_UNROLL before a loop of constant length: it is unrolled whole, so that arrays of vectors
// indexed in it stay in registers.
#pragma once

#if defined(__clang__)
#define LEADSMAN_UNROLL _Pragma("clang loop unroll(full)")
#else
#define LEADSMAN_UNROLL _Pragma("GCC unroll 16")
#endif
