#include "ops/simd/interleave.h"

#include "ops/simd/wanted_targets.h"

#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "ops/simd/interleave.cc"
#include "hwy/foreach_target.h"
#include "hwy/highway.h"

HWY_BEFORE_NAMESPACE();
namespace leadsman::ops::simd::HWY_NAMESPACE {

namespace hn = hwy::HWY_NAMESPACE;
using D = hn::ScalableTag<float>;
constexpr auto kLanes = static_cast<std::int64_t>(hn::MaxLanes(D()));

// The columns that fill whole vectors; returns how many.
template <int kRows>
HWY_INLINE std::int64_t by_vectors(const float* in, std::int64_t stride, std::int64_t length,
                                   float* out) {
  const D d;
  std::int64_t j = 0;
  for (; j + kLanes <= length; j += kLanes) {
    const float* from = in + j;
    float* to = out + j * kRows;
    const auto row = [&](std::int64_t i) HWY_ATTR { return hn::LoadU(d, from + i * stride); };
    if constexpr (kRows == 2) {
      hn::StoreInterleaved2(row(0), row(1), d, to);
    } else if constexpr (kRows == 3) {
      hn::StoreInterleaved3(row(0), row(1), row(2), d, to);
    } else {
      hn::StoreInterleaved4(row(0), row(1), row(2), row(3), d, to);
    }
  }
  return j;
}

void interleave(const float* in, std::int64_t stride, std::int64_t rows, std::int64_t length,
                float* out) {
  std::int64_t done = 0;
  if (rows == 2) done = by_vectors<2>(in, stride, length, out);
  if (rows == 3) done = by_vectors<3>(in, stride, length, out);
  if (rows == 4) done = by_vectors<4>(in, stride, length, out);
  for (std::int64_t j = done; j < length; ++j) {
    for (std::int64_t i = 0; i < rows; ++i) out[j * rows + i] = in[i * stride + j];
  }
}

}  // namespace leadsman::ops::simd::HWY_NAMESPACE
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace leadsman::ops::simd {

HWY_EXPORT(interleave);

void interleave(const float* in, std::int64_t stride, std::int64_t rows, std::int64_t length,
                float* out) {
  HWY_DYNAMIC_DISPATCH(interleave)(in, stride, rows, length, out);
}

}  // namespace leadsman::ops::simd
#endif  // HWY_ONCE
