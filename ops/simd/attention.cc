#include "ops/simd/attention.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <limits>

#include "ops/simd/matrix.h"
#include "ops/simd/pack.h"
#include "ops/simd/reduce.h"

namespace leadsman::ops::simd {
namespace {

constexpr std::int64_t kAllKeysAtOnce = 512;
constexpr std::int64_t kKeyBlock = 256;
constexpr std::int64_t kScoreFloats = 6144;  // 24 KB, half of a first-level cache or less
constexpr std::int64_t kMinRows = 12;
constexpr std::int64_t kMaxRows = 56;

std::int64_t padded(std::int64_t count) {
  return panel_count(count) * kPanel;
}

}  // namespace

AttentionPlan::AttentionPlan(std::int64_t queries, std::int64_t keys, std::int64_t d)
    : queries_(queries),
      keys_(keys),
      d_(d),
      key_block_(keys <= kAllKeysAtOnce ? std::max<std::int64_t>(1, keys) : kKeyBlock) {
  const std::int64_t rows = std::clamp(kScoreFloats / key_block_, kMinRows, kMaxRows);
  blocks_ = std::max<std::int64_t>(1, (queries + rows - 1) / rows);
  block_rows_ = (queries + blocks_ - 1) / blocks_;
}

std::int64_t AttentionPlan::packed_key_floats() const {
  return padded(keys_) * d_;
}

std::int64_t AttentionPlan::packed_value_floats() const {
  return keys_ * padded(d_);
}

std::int64_t AttentionPlan::scratch_floats() const {
  // Scores, sums of the output; largest score, sum, and sum of a block of each row.
  return block_rows_ * (padded(key_block_) + padded(d_) + 3) + kPanel;
}

std::int64_t AttentionPlan::zero_floats() const {
  return std::max(padded(keys_), padded(d_));
}

// Panels of 16 keys, the channels outermost.
void AttentionPlan::pack_keys(HeadRows keys, float* packed) const {
  for (std::int64_t first = 0; first < keys_; first += kPanel) {
    const std::int64_t some = std::min(kPanel, keys_ - first);
    std::array<const float*, kPanel> rows;
    for (std::int64_t i = 0; i < kPanel; ++i) {
      rows[static_cast<std::size_t>(i)] = keys.row(first + std::min(i, some - 1));
    }
    for (std::int64_t e = 0; e < d_; ++e) {
      for (std::size_t i = 0; i < rows.size(); ++i) packed[i] = rows[i][e];
      if (some < kPanel) std::fill(packed + some, packed + kPanel, 0.0F);
      packed += kPanel;
    }
  }
}

// Blocks of keys, in each panels of 16 channels, the keys outermost.
void AttentionPlan::pack_values(HeadRows values, float* packed) const {
  for (std::int64_t begin = 0; begin < keys_; begin += key_block_) {
    const std::int64_t end = std::min(keys_, begin + key_block_);
    for (std::int64_t first = 0; first < d_; first += kPanel) {
      const std::int64_t some = std::min(kPanel, d_ - first);
      for (std::int64_t key = begin; key < end; ++key) {
        const float* from = values.row(key) + first;
        if (some == kPanel) {  // of a fixed length: a few vector moves
          std::copy_n(from, kPanel, packed);
        } else {
          std::fill(std::copy_n(from, some, packed), packed + kPanel, 0.0F);
        }
        packed += kPanel;
      }
    }
  }
}

void AttentionPlan::scale_queries(std::int64_t block, HeadRows queries, float factor,
                                  float* scaled) const {
  for (std::int64_t row = first_row(block); row < first_row(block + 1); ++row) {
    scale_row(queries.row(row), scaled, d_, factor);
    scaled += d_;
  }
}

// To the scores of query `row`.
void AttentionPlan::add_terms(std::int64_t row, ScoreTerms terms, float* scores) const {
  for (const float* term : {terms.bias, terms.mask}) {
    if (term == nullptr) continue;
    term += row * keys_;
    for (std::int64_t i = 0; i < keys_; ++i) scores[i] += term[i];
  }
}

void AttentionPlan::attend_block(std::int64_t block, HeadRows queries, const float* packed_keys,
                                 const float* packed_values, ScoreTerms terms, const float* zeros,
                                 float* scratch, HeadOutput out) const {
  const std::int64_t first = first_row(block);
  const std::int64_t rows = first_row(block + 1) - first;
  const std::int64_t score_stride = padded(key_block_);
  float* scores = scratch;
  float* sums = scores + block_rows_ * score_stride;
  float* largest = sums + block_rows_ * padded(d_);
  float* total = largest + block_rows_;
  float* block_total = total + block_rows_;
  std::array<const float*, kMaxRows> query_rows;
  for (std::int64_t row = 0; row < rows; ++row) {
    query_rows[static_cast<std::size_t>(row)] = queries.row(first + row);
  }
  std::fill_n(largest, rows, -std::numeric_limits<float>::infinity());

  for (std::int64_t begin = 0; begin < keys_; begin += key_block_) {
    const std::int64_t count = std::min(key_block_, keys_ - begin);
    MatrixCall product;
    product.table = query_rows.data();
    product.depth = d_;
    product.rows = rows;
    product.panels = packed_keys + begin * d_;
    product.bias = zeros;
    product.cols = count;
    product.c = scores;
    product.c_stride = score_stride;
    matrix_product(product);

    // The sums so far are relative to a largest score that may have been exceeded.
    std::array<float, kMaxRows> before;
    std::copy_n(largest, rows, before.begin());
    const std::int64_t term = first * keys_ + begin;
    exponentiate_rows({.scores = scores,
                       .stride = score_stride,
                       .rows = rows,
                       .count = count,
                       .factor = terms.factor,
                       .bias = terms.bias == nullptr ? nullptr : terms.bias + term,
                       .mask = terms.mask == nullptr ? nullptr : terms.mask + term,
                       .term_stride = keys_,
                       .largest = largest,
                       .sums = begin == 0 ? total : block_total});
    for (std::int64_t row = 0; begin > 0 && row < rows; ++row) {
      const float correction = std::exp(before[static_cast<std::size_t>(row)] - largest[row]);
      total[row] = total[row] * correction + block_total[row];
      if (correction != 1.0F) scale_row(sums + row * d_, d_, correction);
    }

    product.table = nullptr;
    product.a = scores;
    product.a_stride = score_stride;
    product.depth = count;
    product.panels = packed_values + begin * padded(d_);
    product.cols = d_;
    product.c = sums;
    product.c_stride = d_;
    product.residual = begin == 0 ? nullptr : sums;
    matrix_product(product);
  }
  for (std::int64_t row = 0; row < rows; ++row) {
    scale_row(sums + row * d_, out.row(first + row), d_, 1.0F / total[row]);
  }
}

void AttentionPlan::weights_block(std::int64_t block, HeadRows queries, const float* packed_keys,
                                  ScoreTerms terms, const float* zeros, float* scratch,
                                  float* weights) const {
  const std::int64_t rows = first_row(block + 1) - first_row(block);
  scale_queries(block, queries, terms.factor, scratch);
  MatrixCall product;
  product.a = scratch;
  product.a_stride = d_;
  product.depth = d_;
  product.rows = rows;
  product.panels = packed_keys;
  product.bias = zeros;
  product.cols = keys_;
  product.c = weights;
  product.c_stride = keys_;
  matrix_product(product);
  for (std::int64_t row = 0; row < rows; ++row) {
    add_terms(first_row(block) + row, terms, weights + row * keys_);
    softmax_row(weights + row * keys_, weights + row * keys_, keys_);
  }
}

}  // namespace leadsman::ops::simd
