// Large blocks of memory for activations and weights.
#pragma once

#include <cstddef>

namespace leadsman::internal {

/// Aligned to a cache line or more, not initialised; null when there is none left. Blocks of some
/// megabytes lie on huge pages where Linux offers them: the first touch costs less, and rows that
/// are pages apart do not wear out the address cache. Thread-safe.
void* allocate_block(std::size_t bytes) noexcept;
/// Takes what allocate_block() gave, or null.
void free_block(void* block) noexcept;

}  // namespace leadsman::internal
