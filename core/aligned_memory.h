// Memory for tensors: aligned to a cache line, large blocks in huge pages.
#pragma once

#include <cstddef>
#include <memory>

namespace leadsman {

/// A cache line, and the longest vector.
inline constexpr std::size_t kAlignment = 64;

/// Bytes rounded up so that what follows is aligned too.
constexpr std::size_t aligned_bytes(std::size_t bytes) {
  return (bytes + kAlignment - 1) / kAlignment * kAlignment;
}

struct FreeAligned {
  void operator()(void* memory) const;
};

/// At least `bytes` bytes of undefined content; null when there is no memory.
///
/// Blocks of several megabytes begin at a huge page and ask for such pages (madvise(2)): far fewer
/// faults when they are first touched, and fewer misses in address translation afterwards. Where
/// the system has none, nothing changes.
std::unique_ptr<std::byte, FreeAligned> allocate_aligned(std::size_t bytes);

}  // namespace leadsman
