// Floats in aligned memory.
#pragma once

#include <algorithm>
#include <cstdint>
#include <new>

#include "core/aligned_memory.h"

namespace leadsman::ops::simd {

constexpr std::size_t aligned_floats_bytes(std::int64_t floats) {
  return aligned_bytes(static_cast<std::size_t>(floats) * sizeof(float));
}

/// A fixed number of floats.
class AlignedFloats {
 public:
  AlignedFloats() = default;
  /// Zero at first.
  explicit AlignedFloats(std::int64_t count) : AlignedFloats(count, Undefined()) {
    std::fill_n(data(), count, 0.0F);
  }
  /// For who writes all of them: large blocks are then touched by the threads that fill them.
  static AlignedFloats undefined(std::int64_t count) { return {count, Undefined()}; }

  float* data() { return reinterpret_cast<float*>(memory_.get()); }
  const float* data() const { return reinterpret_cast<const float*>(memory_.get()); }
  std::int64_t count() const { return count_; }
  std::size_t bytes() const { return count_ == 0 ? 0 : aligned_floats_bytes(count_); }

 private:
  struct Undefined {};
  AlignedFloats(std::int64_t count, Undefined /*tag*/)
      : count_(count), memory_(allocate_aligned(aligned_floats_bytes(count))) {
    if (memory_ == nullptr) throw std::bad_alloc();
  }

  std::int64_t count_ = 0;
  std::unique_ptr<std::byte, FreeAligned> memory_;
};

}  // namespace leadsman::ops::simd
