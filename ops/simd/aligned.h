// Floats aligned to 64 bytes (a cache line, and the longest vector).
#pragma once

#include <algorithm>
#include <cstddef>
#include <cstdint>
#include <memory>
#include <new>

#include "core/memory.h"

namespace leadsman::ops::simd {

inline constexpr std::size_t kAlignment = 64;

/// Bytes rounded up so that what follows is aligned too.
constexpr std::size_t aligned_bytes(std::size_t bytes) {
  return (bytes + kAlignment - 1) / kAlignment * kAlignment;
}
constexpr std::size_t aligned_floats_bytes(std::int64_t floats) {
  return aligned_bytes(static_cast<std::size_t>(floats) * sizeof(float));
}

/// A fixed number of floats, zero at first.
class AlignedFloats {
 public:
  AlignedFloats() = default;
  explicit AlignedFloats(std::int64_t count)
      : count_(count),
        data_(static_cast<float*>(internal::allocate_block(aligned_floats_bytes(count)))) {
    if (data_ == nullptr) throw std::bad_alloc();
    std::fill_n(data_.get(), count, 0.0F);
  }
  float* data() { return data_.get(); }
  const float* data() const { return data_.get(); }
  std::int64_t count() const { return count_; }
  std::size_t bytes() const { return count_ == 0 ? 0 : aligned_floats_bytes(count_); }

 private:
  struct Free {
    void operator()(float* data) const { internal::free_block(data); }
  };
  std::int64_t count_ = 0;
  std::unique_ptr<float, Free> data_;
};

}  // namespace leadsman::ops::simd
