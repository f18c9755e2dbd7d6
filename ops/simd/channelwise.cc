#include "ops/simd/channelwise.h"

#include "ops/simd/wanted_targets.h"

#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "ops/simd/channelwise.cc"
#include "hwy/foreach_target.h"
#include "hwy/highway.h"
#include "ops/simd/math-inl.h"

HWY_BEFORE_NAMESPACE();
namespace leadsman::ops::simd::HWY_NAMESPACE {

using D = hn::ScalableTag<float>;
constexpr auto kLanes = static_cast<std::int64_t>(hn::MaxLanes(D()));

// Calls body(d, i) with vectors of all lanes, then with those of one.
template <class Body>
HWY_INLINE void for_values(std::int64_t count, const Body& body) {
  std::int64_t i = 0;
  for (; i + kLanes <= count; i += kLanes) body(D(), i);
  for (; i < count; ++i) body(hn::CappedTag<float, 1>(), i);
}

void multiply_row(const float* a, const float* b, float* out, std::int64_t count) {
  for_values(count, [=](auto d, std::int64_t i) HWY_ATTR {
    hn::StoreU(hn::Mul(hn::LoadU(d, a + i), hn::LoadU(d, b + i)), d, out + i);
  });
}

void normalise_row(const Normalise& by, const float* x, const float* residual, float* out,
                   std::int64_t count) {
  const Normalise n = by;  // stores of floats cannot change a copy
  for_values(count, [=](auto d, std::int64_t i) HWY_ATTR {
    const auto distance = hn::Sub(hn::LoadU(d, x + i), hn::LoadU(d, n.mean + i));
    auto y = hn::MulAdd(distance, hn::LoadU(d, n.scale + i), hn::LoadU(d, n.bias + i));
    if (residual != nullptr) y = hn::Add(y, hn::LoadU(d, residual + i));
    hn::StoreU(at_most(d, at_least(d, y, hn::Set(d, n.low)), hn::Set(d, n.high)), d, out + i);
  });
}

}  // namespace leadsman::ops::simd::HWY_NAMESPACE
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace leadsman::ops::simd {

HWY_EXPORT(multiply_row);
HWY_EXPORT(normalise_row);

void multiply_row(const float* a, const float* b, float* out, std::int64_t count) {
  HWY_DYNAMIC_DISPATCH(multiply_row)(a, b, out, count);
}

void normalise_row(const Normalise& by, const float* x, const float* residual, float* out,
                   std::int64_t count) {
  HWY_DYNAMIC_DISPATCH(normalise_row)(by, x, residual, out, count);
}

}  // namespace leadsman::ops::simd
#endif  // HWY_ONCE
