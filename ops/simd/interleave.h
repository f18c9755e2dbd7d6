// Several rows into one, their values in turns: what brings the planes of an image side by side,
// and shuffles channels.
#pragma once

#include <cstdint>

namespace leadsman::ops::simd {

/// out[j * rows + i] = in[i * stride + j] for i in [0, rows), j in [0, length). Two to four rows go
/// by vectors. `in` and `out` must not overlap.
void interleave(const float* in, std::int64_t stride, std::int64_t rows, std::int64_t length,
                float* out);

}  // namespace leadsman::ops::simd
