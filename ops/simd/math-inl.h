// Elementary functions and activations on one vector; part of every target's code.
//
// NaN goes in, NaN comes out. Errors are those that tests/ops/activation_test.cc measures against
// double precision, with and without fused multiply-add.
#if defined(LEADSMAN_OPS_SIMD_MATH_INL_H_) == defined(HWY_TARGET_TOGGLE)
#ifdef LEADSMAN_OPS_SIMD_MATH_INL_H_
#undef LEADSMAN_OPS_SIMD_MATH_INL_H_
#else
#define LEADSMAN_OPS_SIMD_MATH_INL_H_
#endif

#include <cstdint>

#include "hwy/highway.h"
#include "ops/epilogue.h"

HWY_BEFORE_NAMESPACE();
namespace leadsman::ops::simd::HWY_NAMESPACE {

namespace hn = hwy::HWY_NAMESPACE;

// The larger of v and low, v when that is NaN. The x86 instruction returns its second operand when
// either is NaN; that of Arm (as Highway uses it) the number, so a comparison has to do there.
template <class D, class V = hn::Vec<D>>
HWY_INLINE V at_least(D, V v, V low) {
#if !HWY_ARCH_X86 || HWY_TARGET == HWY_SCALAR || HWY_TARGET == HWY_EMU128
  return hn::IfThenElse(hn::Lt(v, low), low, v);
#else
  return hn::Max(low, v);
#endif
}

template <class D, class V = hn::Vec<D>>
HWY_INLINE V at_most(D, V v, V high) {
#if !HWY_ARCH_X86 || HWY_TARGET == HWY_SCALAR || HWY_TARGET == HWY_EMU128
  return hn::IfThenElse(hn::Gt(v, high), high, v);
#else
  return hn::Min(high, v);
#endif
}

// e^x = 2^n * e^r, r = x - n ln 2 in two parts (Cody & Waite 1980), e^r by the polynomial of the
// Cephes library's expf (Moshier). Requires |x| < 2^20 or NaN; n by adding 1.5 * 2^23, whose unit
// in the last place is 1, so that the sum's bits hold it.
template <class D>
struct ReducedExponential {
  hn::Vec<D> beyond_one;                 // e^r - 1
  hn::Vec<hn::RebindToSigned<D>> whole;  // n
};

template <class D, class V = hn::Vec<D>>
HWY_INLINE ReducedExponential<D> reduce_exponential(D d, V x) {
  const hn::RebindToSigned<D> di;
  const V magic = hn::Set(d, 12582912.0F);
  const V sum = hn::MulAdd(x, hn::Set(d, 1.44269504F), magic);
  const V n = hn::Sub(sum, magic);
  V r = hn::NegMulAdd(n, hn::Set(d, 0.693359375F), x);
  r = hn::NegMulAdd(n, hn::Set(d, -2.12194440e-4F), r);
  V p = hn::Set(d, 1.9875691500e-4F);
  p = hn::MulAdd(p, r, hn::Set(d, 1.3981999507e-3F));
  p = hn::MulAdd(p, r, hn::Set(d, 8.3334519073e-3F));
  p = hn::MulAdd(p, r, hn::Set(d, 4.1665795894e-2F));
  p = hn::MulAdd(p, r, hn::Set(d, 1.6666665459e-1F));
  p = hn::MulAdd(p, r, hn::Set(d, 5.0000001201e-1F));
  return {hn::MulAdd(p, hn::Mul(r, r), r), hn::Sub(hn::BitCast(di, sum), hn::BitCast(di, magic))};
}

// 2^n for -127 < n < 128.
template <class D, class VI>
HWY_INLINE hn::Vec<D> power_of_two(D d, VI n) {
  const hn::RebindToSigned<D> di;
  return hn::BitCast(d, hn::ShiftLeft<23>(hn::Add(n, hn::Set(di, 127))));
}

// Overflows to infinity, underflows through subnormals to 0.
template <class D, class V = hn::Vec<D>>
HWY_INLINE V exponential(D d, V x) {
  x = at_most(d, at_least(d, x, hn::Set(d, -104.0F)), hn::Set(d, 89.0F));
  const auto e = reduce_exponential(d, x);
  const V fraction = hn::Add(e.beyond_one, hn::Set(d, 1.0F));
  // 2^n in two factors, as n may be below the smallest exponent.
  const auto half = hn::ShiftRight<1>(e.whole);
  return hn::Mul(hn::Mul(fraction, power_of_two(d, half)), power_of_two(d, hn::Sub(e.whole, half)));
}

// The same in one factor, with e^-86 for all that is less: enough where 1 is added to it.
template <class D, class V = hn::Vec<D>>
HWY_INLINE V exponential_above(D d, V x) {
  const auto e =
      reduce_exponential(d, at_most(d, at_least(d, x, hn::Set(d, -86.0F)), hn::Set(d, 89.0F)));
  return hn::Mul(hn::Add(e.beyond_one, hn::Set(d, 1.0F)), power_of_two(d, e.whole));
}

// For x <= 0, with 0 below e^-86: what a softmax needs. Subnormals are slow on many processors.
template <class D, class V = hn::Vec<D>>
HWY_INLINE V exponential_of_negative(D d, V x) {
  const V lowest = hn::Set(d, -86.0F);
  const auto e = reduce_exponential(d, at_least(d, x, lowest));
  const V fraction = hn::Add(e.beyond_one, hn::Set(d, 1.0F));
  const V value = hn::Mul(fraction, power_of_two(d, e.whole));
  return hn::IfThenZeroElse(hn::Lt(x, lowest), value);
}

// e^x - 1 = 2^n (e^r - 1) + (2^n - 1) for x <= 0, without cancellation near 0; 0 for x > 0.
template <class D, class V = hn::Vec<D>>
HWY_INLINE V exponential_less_one(D d, V x) {
  const auto e = reduce_exponential(d, at_most(d, at_least(d, x, hn::Set(d, -86.0F)), hn::Zero(d)));
  const V power = power_of_two(d, e.whole);
  return hn::MulAdd(power, e.beyond_one, hn::Sub(power, hn::Set(d, 1.0F)));
}

// max(x, 0) + log(1 + u), u = e^-|x|; log(1 + u) = 2 artanh(s), s = u / (u + 2) <= 1/3, by the
// series s + s^3/3 + s^5/5 + ... of artanh, cut off at 1e-9 of it.
template <class D, class V = hn::Vec<D>>
HWY_INLINE V softplus(D d, V x) {
  const V two = hn::Set(d, 2.0F);
  const V u = exponential_above(d, hn::Neg(hn::Abs(x)));
  const V s = hn::Div(u, hn::Add(u, two));
  const V z = hn::Mul(s, s);
  V p = hn::Set(d, 1.0F / 15.0F);
  p = hn::MulAdd(p, z, hn::Set(d, 1.0F / 13.0F));
  p = hn::MulAdd(p, z, hn::Set(d, 1.0F / 11.0F));
  p = hn::MulAdd(p, z, hn::Set(d, 1.0F / 9.0F));
  p = hn::MulAdd(p, z, hn::Set(d, 1.0F / 7.0F));
  p = hn::MulAdd(p, z, hn::Set(d, 1.0F / 5.0F));
  p = hn::MulAdd(p, z, hn::Set(d, 1.0F / 3.0F));
  const V logarithm = hn::Mul(two, hn::MulAdd(hn::Mul(p, z), s, s));
  return hn::Add(at_least(d, x, hn::Zero(d)), logarithm);
}

// With e = e^x, tanh(log(1 + e)) = e (e + 2) / (e (e + 2) + 2), which is 1 from x = 20 on.
template <class D, class V = hn::Vec<D>>
HWY_INLINE V mish(D d, V x) {
  const V two = hn::Set(d, 2.0F);
  const V e = exponential(d, at_most(d, x, hn::Set(d, 20.0F)));
  const V n = hn::Mul(e, hn::Add(e, two));
  return hn::Mul(x, hn::Div(n, hn::Add(n, two)));
}

template <class D, class V = hn::Vec<D>>
HWY_INLINE V sigmoid(D d, V x) {
  const V one = hn::Set(d, 1.0F);
  return hn::Div(one, hn::Add(one, exponential_above(d, hn::Neg(x))));
}

// Near 0 the odd polynomial of the Cephes library's tanhf (Moshier), else 1 - 2 / (e^2x + 1).
template <class D, class V = hn::Vec<D>>
HWY_INLINE V hyperbolic_tangent(D d, V x) {
  const V size = hn::Abs(x);
  const V z = hn::Mul(x, x);
  V p = hn::Set(d, -5.70498872745e-3F);
  p = hn::MulAdd(p, z, hn::Set(d, 2.06390887954e-2F));
  p = hn::MulAdd(p, z, hn::Set(d, -5.37397155531e-2F));
  p = hn::MulAdd(p, z, hn::Set(d, 1.33314422036e-1F));
  p = hn::MulAdd(p, z, hn::Set(d, -3.33332819422e-1F));
  const V near = hn::MulAdd(hn::Mul(p, z), x, x);
  const V one = hn::Set(d, 1.0F);
  const V e = exponential_above(d, hn::Add(size, size));
  const V far = hn::Sub(one, hn::Div(hn::Set(d, 2.0F), hn::Add(e, one)));
  return hn::IfThenElse(hn::Lt(size, hn::Set(d, 0.625F)), near, hn::CopySign(far, x));
}

// Phi(-t) = e^(-t^2/2) * R(t) for t >= 0, R a rational function fitted to exp(t^2/2) Phi(-t) on
// [0, 14.5] by iterated weighted least squares (tests/ops/make_tables.py); relative error 6e-9
// before rounding.
template <class D, class V = hn::Vec<D>>
HWY_INLINE V normal_tail(D d, V t) {
  t = at_most(d, t, hn::Set(d, 20.0F));
  const V square = hn::Mul(t, t);
  V e = exponential_of_negative(d, hn::Mul(hn::Set(d, -0.5F), square));
#if HWY_NATIVE_FMA
  // What rounding took from t^2 matters in the exponent.
  const V lost = hn::MulSub(t, t, square);
  e = hn::NegMulAdd(hn::Mul(e, hn::Set(d, 0.5F)), lost, e);
#endif
  V p = hn::Set(d, 4.1161954e-3F);
  p = hn::MulAdd(p, t, hn::Set(d, 4.0632541e-2F));
  p = hn::MulAdd(p, t, hn::Set(d, 1.8323320e-1F));
  p = hn::MulAdd(p, t, hn::Set(d, 4.3829251e-1F));
  p = hn::MulAdd(p, t, hn::Set(d, 0.5F));
  V q = hn::Set(d, 1.0317648e-2F);
  q = hn::MulAdd(q, t, hn::Set(d, 1.0185712e-1F));
  q = hn::MulAdd(q, t, hn::Set(d, 4.6946549e-1F));
  q = hn::MulAdd(q, t, hn::Set(d, 1.2024954F));
  q = hn::MulAdd(q, t, hn::Set(d, 1.6744700F));
  q = hn::MulAdd(q, t, hn::Set(d, 1.0F));
  return hn::Div(hn::Mul(e, p), q);
}

// x Phi(x), accurate on the negative side too, where 1 + erf(x / sqrt 2) would cancel.
template <class D, class V = hn::Vec<D>>
HWY_INLINE V gelu(D d, V x) {
  const V tail = normal_tail(d, hn::Abs(x));
  const V below = hn::Sub(hn::Set(d, 1.0F), tail);
  return hn::Mul(x, hn::IfThenElse(hn::Lt(x, hn::Zero(d)), tail, below));
}

template <class D, class V = hn::Vec<D>>
HWY_INLINE V gelu_tanh(D d, V x) {
  // 1 + tanh(u) = 2 sigmoid(2u).
  const V cubic = hn::MulAdd(hn::Mul(hn::Set(d, 0.0713548163F), x), x, hn::Set(d, 1.59576912F));
  const V e = exponential_above(d, hn::Neg(hn::Mul(x, cubic)));
  return hn::Div(x, hn::Add(hn::Set(d, 1.0F), e));
}

template <class D, class V = hn::Vec<D>>
HWY_INLINE V hard_sigmoid(D d, V x) {
  const V v = hn::Add(x, hn::Set(d, 3.0F));
  return hn::Div(at_most(d, at_least(d, v, hn::Zero(d)), hn::Set(d, 6.0F)), hn::Set(d, 6.0F));
}

template <ActivationKind kKind, class D, class V = hn::Vec<D>>
HWY_INLINE V activate_vector(D d, V x, [[maybe_unused]] V parameter) {
  if constexpr (kKind == ActivationKind::kRelu) {
    return at_least(d, x, hn::Zero(d));
  } else if constexpr (kKind == ActivationKind::kRelu6) {
    return at_most(d, at_least(d, x, hn::Zero(d)), hn::Set(d, 6.0F));
  } else if constexpr (kKind == ActivationKind::kLeakyRelu) {
    return hn::IfThenElse(hn::Ge(x, hn::Zero(d)), x, hn::Mul(x, parameter));
  } else if constexpr (kKind == ActivationKind::kGelu) {
    return gelu(d, x);
  } else if constexpr (kKind == ActivationKind::kGeluTanh) {
    return gelu_tanh(d, x);
  } else if constexpr (kKind == ActivationKind::kSilu) {
    return hn::Div(x, hn::Add(hn::Set(d, 1.0F), exponential_above(d, hn::Neg(x))));
  } else if constexpr (kKind == ActivationKind::kSigmoid) {
    return sigmoid(d, x);
  } else if constexpr (kKind == ActivationKind::kHardSigmoid) {
    return hard_sigmoid(d, x);
  } else if constexpr (kKind == ActivationKind::kHardSwish) {
    return hn::Mul(x, hard_sigmoid(d, x));
  } else if constexpr (kKind == ActivationKind::kTanh) {
    return hyperbolic_tangent(d, x);
  } else if constexpr (kKind == ActivationKind::kElu) {
    const V below = hn::Mul(parameter, exponential_less_one(d, x));
    return hn::IfThenElse(hn::Ge(x, hn::Zero(d)), x, below);
  } else if constexpr (kKind == ActivationKind::kSoftplus) {
    return softplus(d, x);
  } else if constexpr (kKind == ActivationKind::kMish) {
    return mish(d, x);
  } else if constexpr (kKind == ActivationKind::kQuickGelu) {
    const V e = exponential_above(d, hn::Mul(x, hn::Set(d, -1.702F)));
    return hn::Div(x, hn::Add(hn::Set(d, 1.0F), e));
  } else {
    return x;
  }
}

// Sum and maximum of the lanes, in a fixed order. The portable target has no shuffles.
template <class D, class V = hn::Vec<D>>
HWY_INLINE float sum_of(D d, V v) {
  HWY_ALIGN float lanes[hn::MaxLanes(d)];
  hn::Store(v, d, lanes);
  constexpr std::size_t n = hn::MaxLanes(d);
  for (std::size_t half = n / 2; half > 0; half /= 2) {
    for (std::size_t i = 0; i < half; ++i) lanes[i] += lanes[i + half];
  }
  return lanes[0];
}

}  // namespace leadsman::ops::simd::HWY_NAMESPACE
HWY_AFTER_NAMESPACE();

#endif  // toggled include guard
