#include "ops/simd/activation.h"

#include <limits>

#include "ops/simd/wanted_targets.h"

#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "ops/simd/activation.cc"
#include "hwy/foreach_target.h"
#include "hwy/highway.h"
#include "ops/simd/activation-inl.h"

HWY_BEFORE_NAMESPACE();
namespace leadsman::ops::simd::HWY_NAMESPACE {

void activate_row(const Activation& activation, const float* in, float* out, std::int64_t count) {
  block_activation(activation.kind)({in, 0, out, 0, 1, count, activation.parameter});
}

void exponential_row(const float* in, float* out, std::int64_t count) {
  map_row(in, out, count, [](auto x) HWY_ATTR { return exponential(hn::ScalableTag<float>(), x); });
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
