// Multi-head scaled dot-product attention (Vaswani et al. 2017), the projections left out:
//
//   y[n, t, h*d + e] = sum over s of p[n, h, t, s] * v[n, s, h*d + e]
//   p[n, h, t, :]    = softmax over s of
//                      scale * (sum over e of q[n, t, h*d + e] * k[n, s, h*d + e]) + bias[h, t, s]
//
// The bias, optional, is [heads, T, S] or one for all heads, [1, T, S]: what is learned of
// positions (Shaw et al. 2018), for one number of tokens. Inputs: one [N, T, 3C] whose channels are
// q, k, v; or q [N, T, C], k [N, S, C], v [N, S, C]. attention_weights gives p itself.
#pragma once

#include "ops/operator.h"
#include "ops/simd/attention.h"

namespace leadsman::ops {

/// The numbers of a layer, and where each head's rows are.
struct AttentionGeometry {
  std::int64_t n, t, s, c, heads, d;
  float scale;
  bool joint;
  Tensor bias;  ///< without data: none

  /// Checks the inputs against each other and the attributes: with `values`, 1 or 3 inputs, else
  /// 1 or 2. Throws Error(kInput).
  AttentionGeometry(const OpContext& context, bool values);

  enum Role { kQueries, kKeys, kValues };
  simd::HeadRows rows(std::span<const ConstTensorView> inputs, Role role, std::int64_t image,
                      std::int64_t head) const;
  /// [T, S] of a head; null without a bias.
  const float* head_bias(std::int64_t head) const {
    return bias.data() == nullptr ? nullptr
                                  : bias.data() + (bias.shape()[0] == 1 ? 0 : head) * t * s;
  }
  simd::ScoreTerms terms(std::int64_t head) const { return {scale, head_bias(head), nullptr}; }
};

/// What attention and attention_weights share.
std::vector<AttributeSpec> attention_attributes();
WeightSpec attention_bias_spec();

/// probabilities[s] of query `t`, in double; the heart of both reference kernels.
void reference_attention_row(const AttentionGeometry& g, simd::HeadRows queries,
                             simd::HeadRows keys, std::int64_t head, std::int64_t t,
                             double* probabilities);

const Operator& attention_operator();

const Strategy& attention_blocked();    ///< "blocked": simd/attention.h
const Strategy& attention_reference();  ///< "reference": plain loops in double

}  // namespace leadsman::ops
