// Work on rows of channels, one a position, in plain loops that compilers turn into vector code.
#pragma once

#include <algorithm>
#include <cstdint>

#include "core/threads.h"

namespace leadsman::ops {

/// Calls body(begin, end) for ranges that together cover the rows [0, rows), each of about 16 KB.
/// Where they lie does not depend on `threads`.
template <typename Body>
void parallel_rows(int threads, std::int64_t rows, std::int64_t channels, const Body& body) {
  constexpr std::int64_t kFloatsInTask = 4096;
  const std::int64_t block =
      std::max<std::int64_t>(1, kFloatsInTask / std::max<std::int64_t>(1, channels));
  parallel_for(threads, (rows + block - 1) / block, [&](std::int64_t task, int) {
    body(task * block, std::min((task + 1) * block, rows));
  });
}

}  // namespace leadsman::ops
