// Activations over rows and blocks of values; part of every target's code.
#if defined(LEADSMAN_OPS_SIMD_ACTIVATION_INL_H_) == defined(HWY_TARGET_TOGGLE)
#ifdef LEADSMAN_OPS_SIMD_ACTIVATION_INL_H_
#undef LEADSMAN_OPS_SIMD_ACTIVATION_INL_H_
#else
#define LEADSMAN_OPS_SIMD_ACTIVATION_INL_H_
#endif

#include <cstdint>

#include "hwy/highway.h"
#include "ops/epilogue.h"
#include "ops/simd/math-inl.h"

HWY_BEFORE_NAMESPACE();
namespace leadsman::ops::simd::HWY_NAMESPACE {

// Applies `function` to whole vectors and, through a small buffer, to the rest.
template <class Function>
HWY_INLINE void map_row(const float* in, float* out, std::int64_t count, const Function& function) {
  const hn::ScalableTag<float> d;
  constexpr auto kLanes = static_cast<std::int64_t>(hn::MaxLanes(d));
  std::int64_t i = 0;
  for (; i + 2 * kLanes <= count; i += 2 * kLanes) {
    const auto first = function(hn::LoadU(d, in + i));
    const auto second = function(hn::LoadU(d, in + i + kLanes));
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

// `rows` rows of `count` values, `in_stride` and `out_stride` floats apart; in and out may be the
// same.
struct ActivationBlock {
  const float* in;
  std::int64_t in_stride;
  float* out;
  std::int64_t out_stride;
  std::int64_t rows;
  std::int64_t count;
  float parameter;
};

template <ActivationKind kKind>
void activate_kind(const ActivationBlock& block) {
  const hn::ScalableTag<float> d;
  const auto p = hn::Set(d, block.parameter);
  for (std::int64_t row = 0; row < block.rows; ++row) {
    map_row(block.in + row * block.in_stride, block.out + row * block.out_stride, block.count,
            [d, p](auto x) HWY_ATTR { return activate_vector<kKind>(d, x, p); });
  }
}

using ActivateBlock = void (*)(const ActivationBlock&);

// What applies activations of this kind: chosen once, called for every block.
inline ActivateBlock block_activation(ActivationKind kind) {
  switch (kind) {
#define LEADSMAN_CASE(kind)  \
  case ActivationKind::kind: \
    return activate_kind<ActivationKind::kind>
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
  return activate_kind<ActivationKind::kNone>;
}

}  // namespace leadsman::ops::simd::HWY_NAMESPACE
HWY_AFTER_NAMESPACE();

#endif  // toggled include guard
