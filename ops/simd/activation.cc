#include "ops/simd/activation.h"

#include <limits>

#include "ops/simd/wanted_targets.h"

#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "ops/simd/activation.cc"
#include "hwy/foreach_target.h"
#include "hwy/highway.h"
#include "ops/simd/math-inl.h"

HWY_BEFORE_NAMESPACE();
namespace leadsman::ops::simd::HWY_NAMESPACE {

using D = hn::ScalableTag<float>;
using V = hn::Vec<D>;

// Applies `function` to whole vectors and, through a small buffer, to the rest.
template <class Function>
HWY_INLINE void map_row(const float* in, float* out, std::int64_t count, const Function& function) {
  const D d;
  constexpr auto kLanes = static_cast<std::int64_t>(hn::MaxLanes(D()));
  std::int64_t i = 0;
  for (; i + 2 * kLanes <= count; i += 2 * kLanes) {
    const V first = function(hn::LoadU(d, in + i));
    const V second = function(hn::LoadU(d, in + i + kLanes));
    hn::StoreU(first, d, out + i);
    hn::StoreU(second, d, out + i + kLanes);
  }
  for (; i < count; i += kLanes) {
    if (i + kLanes <= count) {
      hn::StoreU(function(hn::LoadU(d, in + i)), d, out + i);
      continue;
    }
    HWY_ALIGN float buffer[kLanes] = {};
    for (std::int64_t k = 0; k < count - i; ++k) buffer[k] = in[i + k];
    hn::Store(function(hn::Load(d, buffer)), d, buffer);
    for (std::int64_t k = 0; k < count - i; ++k) out[i + k] = buffer[k];
  }
}

template <ActivationKind kKind>
void activate_kind(const float* in, float* out, std::int64_t count, float parameter) {
  const D d;
  const V p = hn::Set(d, parameter);
  map_row(in, out, count, [d, p](V x) HWY_ATTR { return activate_vector<kKind>(d, x, p); });
}

void activate_row(const Activation& activation, const float* in, float* out, std::int64_t count) {
  switch (activation.kind) {
#define LEADSMAN_CASE(kind)  \
  case ActivationKind::kind: \
    return activate_kind<ActivationKind::kind>(in, out, count, activation.parameter)
    LEADSMAN_CASE(kNone);
    LEADSMAN_CASE(kRelu);
    LEADSMAN_CASE(kRelu6);
    LEADSMAN_CASE(kLeakyRelu);
    LEADSMAN_CASE(kGelu);
    LEADSMAN_CASE(kGeluTanh);
    LEADSMAN_CASE(kSilu);
    LEADSMAN_CASE(kSigmoid);
    LEADSMAN_CASE(kHardSigmoid);
    LEADSMAN_CASE(kHardSwish);
    LEADSMAN_CASE(kTanh);
    LEADSMAN_CASE(kElu);
    LEADSMAN_CASE(kSoftplus);
    LEADSMAN_CASE(kMish);
    LEADSMAN_CASE(kQuickGelu);
#undef LEADSMAN_CASE
  }
}

void exponential_row(const float* in, float* out, std::int64_t count) {
  map_row(in, out, count, [](V x) HWY_ATTR { return exponential(D(), x); });
}

}  // namespace leadsman::ops::simd::HWY_NAMESPACE
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace leadsman::ops::simd {

HWY_EXPORT(activate_row);
HWY_EXPORT(exponential_row);

void activate_row(const Activation& activation, const float* in, float* out, std::int64_t count) {
  HWY_DYNAMIC_DISPATCH(activate_row)(activation, in, out, count);
}

void exponential_row(const float* in, float* out, std::int64_t count) {
  HWY_DYNAMIC_DISPATCH(exponential_row)(in, out, count);
}

std::optional<Bounds> activation_bounds(const Activation& activation) {
  constexpr float kInfinity = std::numeric_limits<float>::infinity();
  switch (activation.kind) {
    case ActivationKind::kNone:
      return Bounds{-kInfinity, kInfinity};
    case ActivationKind::kRelu:
      return Bounds{0.0F, kInfinity};
    case ActivationKind::kRelu6:
      return Bounds{0.0F, 6.0F};
    default:
      return std::nullopt;
  }
}

}  // namespace leadsman::ops::simd
#endif  // HWY_ONCE
