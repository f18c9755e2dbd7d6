#include "measure/stream.h"

#include <algorithm>
#include <chrono>
#include <new>

#include "core/threads.h"
#include "leadsman/board.h"
#include "leadsman/error.h"

namespace leadsman {
namespace measure {

StreamArrays::StreamArrays(std::int64_t elements)
    : a(static_cast<std::size_t>(elements), 1.0),
      b(static_cast<std::size_t>(elements), 2.0),
      c(static_cast<std::size_t>(elements), 0.0) {}

void stream_pass(StreamKernel kernel, StreamArrays& arrays, int threads) {
  const auto elements = static_cast<std::int64_t>(arrays.a.size());
  parallel_for(threads, threads, [&](std::int64_t task, int) {
    const std::int64_t begin = elements * task / threads;
    const std::int64_t end = elements * (task + 1) / threads;
    double* __restrict a = arrays.a.data();
    double* __restrict b = arrays.b.data();
    double* __restrict c = arrays.c.data();
    constexpr double kScalar = 3.0;
    switch (kernel) {
      case StreamKernel::kCopy:
        for (std::int64_t i = begin; i < end; ++i) c[i] = a[i];
        break;
      case StreamKernel::kScale:
        for (std::int64_t i = begin; i < end; ++i) b[i] = kScalar * c[i];
        break;
      case StreamKernel::kAdd:
        for (std::int64_t i = begin; i < end; ++i) c[i] = a[i] + b[i];
        break;
      case StreamKernel::kTriad:
        for (std::int64_t i = begin; i < end; ++i) a[i] = b[i] + kScalar * c[i];
        break;
    }
  });
}

std::int64_t stream_bytes(StreamKernel kernel, std::int64_t elements) {
  const bool two = kernel == StreamKernel::kCopy || kernel == StreamKernel::kScale;
  return (two ? 2 : 3) * static_cast<std::int64_t>(sizeof(double)) * elements;
}

}  // namespace measure

StreamRates measure_stream(const Board& board, int threads) {
  using measure::StreamKernel;
  constexpr std::int64_t kUnknown = std::int64_t{32} << 20;
  const std::int64_t cache = board.last_cache_bytes();
  std::int64_t bytes = cache > 0 ? 4 * cache : kUnknown;
  if (board.memory_bytes > 0) bytes = std::min(bytes, board.memory_bytes / 12);
  const std::int64_t elements = bytes / static_cast<std::int64_t>(sizeof(double));
  StreamRates rates;
  rates.array_bytes = elements * static_cast<std::int64_t>(sizeof(double));
  try {
    measure::StreamArrays arrays(elements);
    double* const best[] = {&rates.copy, &rates.scale, &rates.add, &rates.triad};
    constexpr int kPasses = 6;
    for (int pass = 0; pass < kPasses; ++pass) {
      for (int k = 0; k < 4; ++k) {
        const auto kernel = static_cast<StreamKernel>(k);
        const auto begin = std::chrono::steady_clock::now();
        measure::stream_pass(kernel, arrays, threads);
        const std::chrono::duration<double> passed = std::chrono::steady_clock::now() - begin;
        // The first pass does not count, as in STREAM.
        const double rate =
            static_cast<double>(measure::stream_bytes(kernel, elements)) / passed.count();
        if (pass > 0) *best[k] = std::max(*best[k], rate);
      }
    }
  } catch (const std::bad_alloc&) {
    throw Error(ErrorKind::kMemory, "not enough memory to measure its bandwidth");
  }
  return rates;
}

}  // namespace leadsman
