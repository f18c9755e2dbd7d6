// The four kernels of McCalpin's STREAM, one pass each.
#pragma once

#include <array>
#include <cstdint>
#include <vector>

namespace leadsman::measure {

/// Three arrays of doubles, begun as STREAM does: a = 1, b = 2, c = 0.
struct StreamArrays {
  std::vector<double> a, b, c;
  explicit StreamArrays(std::int64_t elements);
};

enum class StreamKernel { kCopy, kScale, kAdd, kTriad };

/// c = a; b = 3 c; c = a + b; a = b + 3 c.
void stream_pass(StreamKernel kernel, StreamArrays& arrays, int threads);
/// Bytes that a pass over `elements` reads and writes by STREAM's count.
std::int64_t stream_bytes(StreamKernel kernel, std::int64_t elements);

}  // namespace leadsman::measure
