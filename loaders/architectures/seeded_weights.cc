// Weights of architectures that nobody has trained.
#include <cmath>
#include <new>

#include "leadsman/architectures.h"
#include "leadsman/error.h"

namespace leadsman {
namespace {

/// SplitMix64 (Steele, Lea & Flood 2014, figure 14); the standard library's distributions differ
/// from one implementation to the next.
class SplitMix64 {
 public:
  explicit SplitMix64(std::uint64_t seed) : state_(seed) {}
  std::uint64_t next() {
    std::uint64_t z = (state_ += 0x9e3779b97f4a7c15U);
    z = (z ^ (z >> 30)) * 0xbf58476d1ce4e5b9U;
    z = (z ^ (z >> 27)) * 0x94d049bb133111ebU;
    return z ^ (z >> 31);
  }

 private:
  std::uint64_t state_;
};

/// The sum of a word's four 16-bit quarters less its mean: near to a normal variable (Irwin & Hall
/// 1927), within 3.47 standard deviations, and exact in integers, unlike logarithms and cosines,
/// whose last bits depend on the machine.
std::int64_t bell(std::uint64_t word) {
  std::int64_t sum = -2 * std::int64_t{0xffff};
  for (int i = 0; i < 4; ++i) sum += static_cast<std::int64_t>(word >> (16 * i) & 0xffffU);
  return sum;
}

/// Standard deviation of bell(): four times the variance of 0..65535, (2^32 - 1) / 12, under a
/// root.
double bell_deviation() {
  return std::sqrt(4.0 * (0x1p32 - 1.0) / 12.0);
}

/// FNV-1a (Fowler, Noll & Vo): every tensor has a sequence of its own.
std::uint64_t hash(std::string_view name) {
  std::uint64_t h = 0xcbf29ce484222325U;
  for (const char c : name) h = (h ^ static_cast<unsigned char>(c)) * 0x100000001b3U;
  return h;
}

Tensor seeded(const std::string& name, const ArchitectureWeight& weight, std::uint64_t seed) {
  SplitMix64 random(SplitMix64(seed).next() ^ hash(name));
  Tensor tensor(weight.shape);
  float* const values = tensor.mutable_data();
  const double step = weight.spread / bell_deviation();
  const auto mean = static_cast<float>(weight.mean);
  for (std::int64_t i = 0; i < tensor.elements(); ++i) {
    // Two roundings, to double and to float, that no compiler may fuse with the sum.
    const auto offset = static_cast<float>(static_cast<double>(bell(random.next())) * step);
    values[i] = mean + offset;
  }
  return tensor;
}

}  // namespace

WeightMap seeded_weights(const Architecture& architecture, std::uint64_t seed) {
  WeightMap weights;
  try {
    for (const auto& [name, weight] : architecture.weights) {
      weights.emplace(name, seeded(name, weight, seed));
    }
  } catch (const std::bad_alloc&) {
    throw Error(ErrorKind::kMemory,
                architecture.graph.name + ": not enough memory for its weights");
  }
  return weights;
}

}  // namespace leadsman
