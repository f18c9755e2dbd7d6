#include "core/memory.h"

#include <cstdlib>

#include <sys/mman.h>

namespace leadsman::internal {

void* allocate_block(std::size_t bytes) noexcept {
  constexpr std::size_t kLine = 64;
  constexpr std::size_t kHugePage = std::size_t{2} << 20;
  void* block = nullptr;
  const bool large = bytes >= kHugePage;
  if (::posix_memalign(&block, large ? kHugePage : kLine, bytes == 0 ? kLine : bytes) != 0) {
    return nullptr;
  }
  // Whole pages only, so that no more memory is used. Where there are none it stays as it is.
  if (large) ::madvise(block, bytes / kHugePage * kHugePage, MADV_HUGEPAGE);
  return block;
}

void free_block(void* block) noexcept {
  std::free(block);
}

}  // namespace leadsman::internal
