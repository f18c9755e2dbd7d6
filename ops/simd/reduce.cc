#include "ops/simd/reduce.h"

#include <algorithm>
#include <cmath>
#include <cstddef>
#include <limits>

#include "ops/simd/wanted_targets.h"

#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "ops/simd/reduce.cc"
#include "hwy/foreach_target.h"
#include "hwy/highway.h"
#include "ops/simd/math-inl.h"

HWY_BEFORE_NAMESPACE();
namespace leadsman::ops::simd::HWY_NAMESPACE {

using D = hn::ScalableTag<float>;
using V = hn::Vec<D>;
constexpr auto kLanes = static_cast<std::int64_t>(hn::MaxLanes(D()));

// Adds term(i) for i in [0, count): four vectors of partial sums, then the rest one by one.
template <class VectorTerm, class Term>
HWY_INLINE float sum_terms(std::int64_t count, const VectorTerm& vector_term, const Term& term) {
  const D d;
  V s0 = hn::Zero(d);
  V s1 = s0;
  V s2 = s0;
  V s3 = s0;
  std::int64_t i = 0;
  for (; i + 4 * kLanes <= count; i += 4 * kLanes) {
    s0 = hn::Add(s0, vector_term(i));
    s1 = hn::Add(s1, vector_term(i + kLanes));
    s2 = hn::Add(s2, vector_term(i + 2 * kLanes));
    s3 = hn::Add(s3, vector_term(i + 3 * kLanes));
  }
  for (; i + kLanes <= count; i += kLanes) s0 = hn::Add(s0, vector_term(i));
  float sum = sum_of(d, hn::Add(hn::Add(s0, s1), hn::Add(s2, s3)));
  for (; i < count; ++i) sum += term(i);
  return sum;
}

void layer_norm_row(const float* in, const float* weight, const float* bias, float eps, float* out,
                    std::int64_t count) {
  const D d;
  const auto divisor = static_cast<float>(count);
  const float mean = sum_terms(
                         count, [in](std::int64_t i) HWY_ATTR { return hn::LoadU(D(), in + i); },
                         [in](std::int64_t i) { return in[i]; }) /
                     divisor;
  const V mean_vector = hn::Set(d, mean);
  const float variance = sum_terms(
                             count,
                             [in, mean_vector](std::int64_t i) HWY_ATTR {
                               const V x = hn::Sub(hn::LoadU(D(), in + i), mean_vector);
                               return hn::Mul(x, x);
                             },
                             [in, mean](std::int64_t i) {
                               const float x = in[i] - mean;
                               return x * x;
                             }) /
                         divisor;
  const float factor = 1.0F / std::sqrt(variance + eps);
  const V factor_vector = hn::Set(d, factor);
  std::int64_t i = 0;
  for (; i + kLanes <= count; i += kLanes) {
    V x = hn::Mul(hn::Sub(hn::LoadU(d, in + i), mean_vector), factor_vector);
    if (weight != nullptr) x = hn::Mul(x, hn::LoadU(d, weight + i));
    if (bias != nullptr) x = hn::Add(x, hn::LoadU(d, bias + i));
    hn::StoreU(x, d, out + i);
  }
  for (; i < count; ++i) {
    float x = (in[i] - mean) * factor;
    if (weight != nullptr) x *= weight[i];
    if (bias != nullptr) x += bias[i];
    out[i] = x;
  }
}

// The largest value; a NaN may get lost here, but not in the exponentials that follow.
HWY_INLINE float largest_of(const float* in, std::int64_t count) {
  const D d;
  float largest = -std::numeric_limits<float>::infinity();
  std::int64_t i = 0;
  if (count >= kLanes) {
    V even = hn::LoadU(d, in);
    V odd = even;
    for (i = kLanes; i + 2 * kLanes <= count; i += 2 * kLanes) {
      even = hn::Max(even, hn::LoadU(d, in + i));
      odd = hn::Max(odd, hn::LoadU(d, in + i + kLanes));
    }
    if (i + kLanes <= count) {
      even = hn::Max(even, hn::LoadU(d, in + i));
      i += kLanes;
    }
    HWY_ALIGN float lanes[kLanes];
    hn::Store(hn::Max(even, odd), d, lanes);
    for (const float lane : lanes) largest = std::max(largest, lane);
  }
  for (; i < count; ++i) largest = std::max(largest, in[i]);
  return largest;
}

// out = exp(in - largest), 0 below e^-86; returns the sum. Reads and writes whole vectors: the
// last one's excess becomes 0.
HWY_INLINE float exponentials(const float* in, float* out, std::int64_t count, float largest) {
  const D d;
  const V shift = hn::Set(d, largest);
  V sum0 = hn::Zero(d);
  V sum1 = sum0;
  std::int64_t i = 0;
  for (; i + 2 * kLanes <= count; i += 2 * kLanes) {
    const V e0 = exponential_of_negative(d, hn::Sub(hn::LoadU(d, in + i), shift));
    const V e1 = exponential_of_negative(d, hn::Sub(hn::LoadU(d, in + i + kLanes), shift));
    hn::StoreU(e0, d, out + i);
    hn::StoreU(e1, d, out + i + kLanes);
    sum0 = hn::Add(sum0, e0);
    sum1 = hn::Add(sum1, e1);
  }
  for (; i < count; i += kLanes) {
    const V e =
        hn::IfThenElseZero(hn::FirstN(d, static_cast<std::size_t>(count - i)),
                           exponential_of_negative(d, hn::Sub(hn::LoadU(d, in + i), shift)));
    hn::StoreU(e, d, out + i);
    sum0 = hn::Add(sum0, e);
  }
  return sum_of(d, hn::Add(sum0, sum1));
}

void scale(const float* in, float* out, std::int64_t count, float factor) {
  const D d;
  const V vector = hn::Set(d, factor);
  std::int64_t i = 0;
  for (; i + kLanes <= count; i += kLanes) {
    hn::StoreU(hn::Mul(hn::LoadU(d, in + i), vector), d, out + i);
  }
  for (; i < count; ++i) out[i] = in[i] * factor;
}

// scores = factor * scores + bias + mask; returns the largest. Terms that are not there: null.
HWY_INLINE float finish_scores(float* scores, std::int64_t count, float factor, const float* bias,
                               const float* mask) {
  const D d;
  const V by = hn::Set(d, factor);
  V largest = hn::Set(d, -std::numeric_limits<float>::infinity());
  std::int64_t i = 0;
  for (; i + kLanes <= count; i += kLanes) {
    V s = hn::LoadU(d, scores + i);
    s = bias == nullptr ? hn::Mul(s, by) : hn::MulAdd(s, by, hn::LoadU(d, bias + i));
    if (mask != nullptr) s = hn::Add(s, hn::LoadU(d, mask + i));
    hn::StoreU(s, d, scores + i);
    largest = hn::Max(largest, s);
  }
  HWY_ALIGN float lanes[kLanes];
  hn::Store(largest, d, lanes);
  for (std::int64_t half = kLanes / 2; half > 0; half /= 2) {
    for (std::int64_t k = 0; k < half; ++k) lanes[k] = std::max(lanes[k], lanes[k + half]);
  }
  for (; i < count; ++i) {
    float s = scores[i] * factor;
    if (bias != nullptr) s += bias[i];
    if (mask != nullptr) s += mask[i];
    scores[i] = s;
    lanes[0] = std::max(lanes[0], s);
  }
  return lanes[0];
}

void exponentiate_rows(const ScoreRows& call) {
  const std::int64_t whole = (call.count + kLanes - 1) / kLanes * kLanes;
  for (std::int64_t r = 0; r < call.rows; ++r) {
    float* scores = call.scores + r * call.stride;
    const std::int64_t term = r * call.term_stride;
    const float largest =
        std::max(call.largest[r], finish_scores(scores, call.count, call.factor,
                                                call.bias ? call.bias + term : nullptr,
                                                call.mask ? call.mask + term : nullptr));
    for (std::int64_t i = call.count; i < whole; ++i) scores[i] = largest;
    call.largest[r] = largest;
    call.sums[r] = exponentials(scores, scores, call.count, largest);
  }
}

void softmax_row(const float* in, float* out, std::int64_t count) {
  // Whole vectors where they lie, the rest in a buffer.
  const float largest = largest_of(in, count);
  const std::int64_t whole = count / kLanes * kLanes;
  HWY_ALIGN float rest[kLanes] = {};
  for (std::int64_t i = whole; i < count; ++i) rest[i - whole] = in[i];
  float sum = exponentials(in, out, whole, largest);
  sum += exponentials(rest, rest, count - whole, largest);
  for (std::int64_t i = whole; i < count; ++i) out[i] = rest[i - whole];
  scale(out, out, count, 1.0F / sum);
}

void column_means(const float* in, std::int64_t rows, std::int64_t cols, std::int64_t stride,
                  float* out) {
  const D d;
  const float divisor = static_cast<float>(rows);
  std::int64_t c = 0;
  for (; c + kLanes <= cols; c += kLanes) {
    V even = hn::Zero(d);
    V odd = even;
    std::int64_t r = 0;
    for (; r + 2 <= rows; r += 2) {
      even = hn::Add(even, hn::LoadU(d, in + r * stride + c));
      odd = hn::Add(odd, hn::LoadU(d, in + (r + 1) * stride + c));
    }
    if (r < rows) even = hn::Add(even, hn::LoadU(d, in + r * stride + c));
    hn::StoreU(hn::Div(hn::Add(even, odd), hn::Set(d, divisor)), d, out + c);
  }
  for (; c < cols; ++c) {
    float sum = 0.0F;
    for (std::int64_t r = 0; r < rows; ++r) sum += in[r * stride + c];
    out[c] = sum / divisor;
  }
}

}  // namespace leadsman::ops::simd::HWY_NAMESPACE
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace leadsman::ops::simd {

HWY_EXPORT(layer_norm_row);
HWY_EXPORT(softmax_row);
HWY_EXPORT(exponentiate_rows);
HWY_EXPORT(scale);
HWY_EXPORT(column_means);

void layer_norm_row(const float* in, const float* weight, const float* bias, float eps, float* out,
                    std::int64_t count) {
  HWY_DYNAMIC_DISPATCH(layer_norm_row)(in, weight, bias, eps, out, count);
}

void softmax_row(const float* in, float* out, std::int64_t count) {
  HWY_DYNAMIC_DISPATCH(softmax_row)(in, out, count);
}

void exponentiate_rows(const ScoreRows& call) {
  HWY_DYNAMIC_DISPATCH(exponentiate_rows)(call);
}

void scale_row(float* values, std::int64_t count, float factor) {
  HWY_DYNAMIC_DISPATCH(scale)(values, values, count, factor);
}

void scale_row(const float* in, float* out, std::int64_t count, float factor) {
  HWY_DYNAMIC_DISPATCH(scale)(in, out, count, factor);
}

void column_means(const float* in, std::int64_t rows, std::int64_t cols, std::int64_t stride,
                  float* out) {
  HWY_DYNAMIC_DISPATCH(column_means)(in, rows, cols, stride, out);
}

}  // namespace leadsman::ops::simd
#endif  // HWY_ONCE
