#include "ops/memory_order.h"

#include <algorithm>

#include "core/threads.h"
#include "ops/simd/interleave.h"
#include "ops/simd/target.h"

namespace leadsman::ops {

void to_memory_order(const float* from, const TensorView& to, int threads) {
  constexpr std::int64_t kTaskPixels = 4096;
  constexpr std::int64_t kMostPlanes = 4;
  if (to.shape.rank() != 4 || to.shape[1] > kMostPlanes) {
    copy_from_logical(from, to);
    return;
  }
  simd::choose_target();
  const std::int64_t planes = to.shape[1];
  const std::int64_t area = to.shape[2] * to.shape[3];
  const std::int64_t tasks = (area + kTaskPixels - 1) / kTaskPixels;
  parallel_for(threads, to.shape[0] * tasks, [&](std::int64_t task, int) {
    const std::int64_t image = task / tasks * planes * area;
    const std::int64_t first = task % tasks * kTaskPixels;
    simd::interleave(from + image + first, area, planes, std::min(kTaskPixels, area - first),
                     to.data + image + first * planes);
  });
}

}  // namespace leadsman::ops
