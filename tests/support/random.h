// Seeded random tensors and numbers: the same on every machine and standard library.
#pragma once

#include <cstdint>
#include <iterator>

#include "leadsman/tensor.h"

namespace leadsman::testing {

/// splitmix64 (Steele, Lea & Flood 2014). The standard distributions differ between libraries.
class Random {
 public:
  explicit Random(std::uint64_t seed) : state_(seed) {}
  std::uint64_t bits() {
    std::uint64_t z = (state_ += 0x9e3779b97f4a7c15U);
    z = (z ^ (z >> 30)) * 0xbf58476d1ce4e5b9U;
    z = (z ^ (z >> 27)) * 0x94d049bb133111ebU;
    return z ^ (z >> 31);
  }
  /// Uniform in [low, high).
  double uniform(double low = 0.0, double high = 1.0) {
    return low + (high - low) * (static_cast<double>(bits() >> 11) * 0x1p-53);
  }
  /// Uniform in low..high, both included.
  std::int64_t integer(std::int64_t low, std::int64_t high) {
    return low + static_cast<std::int64_t>(bits() % static_cast<std::uint64_t>(high - low + 1));
  }
  template <typename List>
  auto pick(const List& list) {
    return list[static_cast<std::size_t>(
        integer(0, static_cast<std::int64_t>(std::size(list)) - 1))];
  }
  bool coin() { return (bits() & 1) != 0; }

  /// Uniform values in [low, high), in logical order.
  Tensor tensor(const Shape& shape, double low = -1.0, double high = 1.0) {
    Tensor tensor(shape);
    float* data = tensor.mutable_data();
    for (std::int64_t i = 0; i < shape.elements(); ++i) {
      data[i] = static_cast<float>(uniform(low, high));
    }
    return tensor;
  }

 private:
  std::uint64_t state_;
};

}  // namespace leadsman::testing
