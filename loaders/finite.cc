#include "loaders/finite.h"

#include <algorithm>
#include <bit>
#include <cmath>

#include "core/threads.h"

namespace leadsman::loaders {
namespace {

// With the exponent's bits all set, and only then, adding one to them carries into the sign's bit.
std::uint32_t carry(float value) {
  return (std::bit_cast<std::uint32_t>(value) & 0x7f800000u) + 0x00800000u;
}

}  // namespace

std::int64_t find_non_finite(std::span<const float> values) {
  constexpr std::size_t kBlock = 4096;  // a fixed length, so that the compiler vectorises the loop
  std::size_t begin = 0;
  for (; values.size() - begin >= kBlock; begin += kBlock) {
    const float* const block = values.data() + begin;
    std::uint32_t seen = 0;
    for (std::size_t i = 0; i < kBlock; ++i) seen |= carry(block[i]);
    if ((seen >> 31) != 0) break;
  }
  for (std::size_t i = begin; i < values.size(); ++i) {
    if ((carry(values[i]) >> 31) != 0) return static_cast<std::int64_t>(i);
  }
  return -1;
}

NonFinite find_non_finite(const std::vector<const Tensor*>& tensors, int threads) {
  struct Chunk {
    std::size_t tensor;
    std::int64_t begin, count;
    std::int64_t found = -1;
  };
  constexpr std::int64_t kChunk = std::int64_t{1} << 18;
  std::vector<Chunk> chunks;
  for (std::size_t t = 0; t < tensors.size(); ++t) {
    const std::int64_t elements = tensors[t]->elements();
    for (std::int64_t begin = 0; begin < elements; begin += kChunk) {
      chunks.push_back({t, begin, std::min(kChunk, elements - begin)});
    }
  }
  parallel_for(threads, static_cast<std::int64_t>(chunks.size()),
               [&](std::int64_t task, int /*worker*/) {
                 Chunk& chunk = chunks[static_cast<std::size_t>(task)];
                 chunk.found = find_non_finite(tensors[chunk.tensor]->values().subspan(
                     static_cast<std::size_t>(chunk.begin), static_cast<std::size_t>(chunk.count)));
               });
  for (const Chunk& chunk : chunks) {
    if (chunk.found >= 0) return {chunk.tensor, chunk.begin + chunk.found};
  }
  return {};
}

std::string index_text(const Shape& shape, std::int64_t index) {
  std::string text;
  for (int axis = shape.rank() - 1; axis >= 0; --axis) {
    text = std::to_string(index % shape[axis]) + (text.empty() ? "" : ", ") + text;
    index /= shape[axis];
  }
  return "[" + text + "]";
}

std::string non_finite_text(const Tensor& tensor, std::int64_t index) {
  const char* const what = std::isnan(tensor.data()[index]) ? "NaN" : "infinite";
  return "the element at " + index_text(tensor.shape(), index) + " is " + what;
}

}  // namespace leadsman::loaders
