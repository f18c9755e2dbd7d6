#include "core/aligned_memory.h"

#include <algorithm>
#include <cstdlib>

#include <sys/mman.h>

namespace leadsman {
namespace {

constexpr std::size_t kHugePage = std::size_t{1} << 21;  // x86-64's, and Arm's with 4 KiB pages

}  // namespace

void FreeAligned::operator()(void* memory) const {
  std::free(memory);
}

std::unique_ptr<std::byte, FreeAligned> allocate_aligned(std::size_t bytes) {
  const bool large = bytes >= 2 * kHugePage;
  void* memory = nullptr;
  if (::posix_memalign(&memory, large ? kHugePage : kAlignment, std::max(bytes, kAlignment)) != 0) {
    return nullptr;
  }
#ifdef MADV_HUGEPAGE
  // Whole pages alone: the rest of the last one would be paid for and not used.
  if (large) ::madvise(memory, bytes / kHugePage * kHugePage, MADV_HUGEPAGE);
#endif
  return std::unique_ptr<std::byte, FreeAligned>(static_cast<std::byte*>(memory));
}

}  // namespace leadsman
