#include "ops/simd/winograd.h"

#include <algorithm>
#include <limits>

#include "ops/conv2d/winograd.h"
#include "ops/simd/activation.h"
#include "ops/simd/unroll.h"
#include "ops/simd/wanted_targets.h"

#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "ops/simd/winograd.cc"
#include "hwy/foreach_target.h"
#include "hwy/highway.h"
#include "ops/simd/activation-inl.h"
#include "ops/simd/math-inl.h"

HWY_BEFORE_NAMESPACE();
namespace leadsman::ops::simd::HWY_NAMESPACE {

using D = hn::CappedTag<float, kMinWinogradChannels>;
using V = hn::Vec<D>;
constexpr auto kLanes = static_cast<std::int64_t>(hn::MaxLanes(D()));

HWY_INLINE V constant(double value) {
  return hn::Set(D(), static_cast<float>(value));
}

// y = B^T x
template <int kTile>
HWY_INLINE void transform_input(const V (&x)[kTile + 2], V (&y)[kTile + 2]) {
  if constexpr (kTile == 2) {
    y[0] = hn::Sub(x[0], x[2]);
    y[1] = hn::Add(x[1], x[2]);
    y[2] = hn::Sub(x[2], x[1]);
    y[3] = hn::Sub(x[1], x[3]);
  } else {
    using W = Winograd<4>;
    const V product = constant(W::kNear2 * W::kFar2);
    const V sum = constant(W::kNear2 + W::kFar2);
    const V near_even = hn::NegMulAdd(constant(W::kFar2), x[2], x[4]);
    const V near_odd = hn::NegMulAdd(constant(W::kFar2), x[1], x[3]);
    const V far_even = hn::NegMulAdd(constant(W::kNear2), x[2], x[4]);
    const V far_odd = hn::NegMulAdd(constant(W::kNear2), x[1], x[3]);
    y[0] = hn::MulAdd(product, x[0], hn::NegMulAdd(sum, x[2], x[4]));
    y[1] = hn::MulAdd(constant(W::kNear), near_odd, near_even);
    y[2] = hn::NegMulAdd(constant(W::kNear), near_odd, near_even);
    y[3] = hn::MulAdd(constant(W::kFar), far_odd, far_even);
    y[4] = hn::NegMulAdd(constant(W::kFar), far_odd, far_even);
    y[5] = hn::MulAdd(product, x[1], hn::NegMulAdd(sum, x[3], x[5]));
  }
}

// y = A^T x
template <int kTile>
HWY_INLINE void transform_output(const V (&x)[kTile + 2], V (&y)[kTile]) {
  if constexpr (kTile == 2) {
    y[0] = hn::Add(hn::Add(x[0], x[1]), x[2]);
    y[1] = hn::Sub(hn::Sub(x[1], x[2]), x[3]);
  } else {
    using W = Winograd<4>;
    const V near_even = hn::Add(x[1], x[2]);
    const V near_odd = hn::Sub(x[1], x[2]);
    const V far_even = hn::Add(x[3], x[4]);
    const V far_odd = hn::Sub(x[3], x[4]);
    y[0] = hn::Add(hn::Add(x[0], near_even), far_even);
    y[1] = hn::MulAdd(constant(W::kFar), far_odd, hn::Mul(constant(W::kNear), near_odd));
    y[2] = hn::MulAdd(constant(W::kFar2), far_even, hn::Mul(constant(W::kNear2), near_even));
    y[3] = hn::MulAdd(constant(W::kFar * W::kFar2), far_odd,
                      hn::MulAdd(constant(W::kNear * W::kNear2), near_odd, x[5]));
  }
}

template <int kTile>
void input_tile(const WinogradInput& call) {
  const D d;
  constexpr int kSide = kTile + 2;
  for (std::int64_t block = 0; block < call.channels; block += kLanes) {
    const std::int64_t c = std::min(block, call.channels - kLanes);
    V columns[kSide][kSide];
    LEADSMAN_UNROLL
    for (int v = 0; v < kSide; ++v) {
      V x[kSide];
      V y[kSide];
      LEADSMAN_UNROLL
      for (int u = 0; u < kSide; ++u) x[u] = hn::LoadU(d, call.pixels[u * kSide + v] + c);
      transform_input<kTile>(x, y);
      LEADSMAN_UNROLL
      for (int u = 0; u < kSide; ++u) columns[u][v] = y[u];
    }
    float* out = call.out + c;
    LEADSMAN_UNROLL
    for (int u = 0; u < kSide; ++u) {
      V y[kSide];
      transform_input<kTile>(columns[u], y);
      LEADSMAN_UNROLL
      for (int v = 0; v < kSide; ++v) {
        hn::StoreU(y[v], d, out);
        out += call.position_stride;
      }
    }
  }
}

template <int kTile>
void output_tile(const WinogradOutput& call) {
  const D d;
  constexpr int kSide = kTile + 2;
  constexpr float kInfinity = std::numeric_limits<float>::infinity();
  const auto bounds = activation_bounds(call.activation);
  const V low = hn::Set(d, bounds ? bounds->low : -kInfinity);
  const V high = hn::Set(d, bounds ? bounds->high : kInfinity);
  for (std::int64_t block = 0; block < call.channels; block += kLanes) {
    const std::int64_t c = std::min(block, call.channels - kLanes);
    V rows[kTile][kSide];
    LEADSMAN_UNROLL
    for (int v = 0; v < kSide; ++v) {
      V x[kSide];
      V y[kTile];
      LEADSMAN_UNROLL
      for (int u = 0; u < kSide; ++u) {
        x[u] = hn::LoadU(d, call.sums + (u * kSide + v) * call.position_stride + c);
      }
      transform_output<kTile>(x, y);
      LEADSMAN_UNROLL
      for (int i = 0; i < kTile; ++i) rows[i][v] = y[i];
    }
    const V bias = hn::LoadU(d, call.bias + c);
    LEADSMAN_UNROLL
    for (int i = 0; i < kTile; ++i) {
      if (i >= call.rows) break;
      V y[kTile];
      transform_output<kTile>(rows[i], y);
      LEADSMAN_UNROLL
      for (int j = 0; j < kTile; ++j) {
        if (j >= call.cols) break;
        const std::int64_t at = i * call.row_stride + j * call.stride + c;
        V value = hn::Add(y[j], bias);
        if (call.residual != nullptr) value = hn::Add(value, hn::LoadU(d, call.residual + at));
        hn::StoreU(at_most(d, at_least(d, value, low), high), d, call.out + at);
      }
    }
  }
  if (bounds) return;
  for (std::int64_t i = 0; i < call.rows; ++i) {
    float* row = call.out + i * call.row_stride;
    block_activation(call.activation.kind)(
        {row, call.stride, row, call.stride, call.cols, call.channels, call.activation.parameter});
  }
}

void winograd_input(int tile, const WinogradInput& call) {
  tile == 2 ? input_tile<2>(call) : input_tile<4>(call);
}

void winograd_output(int tile, const WinogradOutput& call) {
  tile == 2 ? output_tile<2>(call) : output_tile<4>(call);
}

}  // namespace leadsman::ops::simd::HWY_NAMESPACE
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace leadsman::ops::simd {

HWY_EXPORT(winograd_input);
HWY_EXPORT(winograd_output);

void winograd_input(int tile, const WinogradInput& call) {
  HWY_DYNAMIC_DISPATCH(winograd_input)(tile, call);
}

void winograd_output(int tile, const WinogradOutput& call) {
  HWY_DYNAMIC_DISPATCH(winograd_output)(tile, call);
}

}  // namespace leadsman::ops::simd
#endif  // HWY_ONCE
