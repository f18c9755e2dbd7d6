// Scaled dot-product attention of one head: softmax(scale * q k^T) v (Vaswani et al. 2017), in
// blocks of query rows whose scores stay in the first-level cache. Long sequences go through
// blocks of keys with an online softmax (Milakov & Gimelshein 2018; Rabe & Staats 2021), so the
// memory is linear in the number of tokens.
//
// Keys and values are packed once a head (`pack`), then blocks of queries may run on any threads.
#pragma once

#include <cstddef>
#include <cstdint>

namespace leadsman::ops::simd {

/// Rows of d neighbouring floats: `stride` floats apart, or, of a window in an image, where a table
/// says.
struct HeadRows {
  const float* data = nullptr;
  std::int64_t stride = 0;
  const float* const* table = nullptr;  ///< when set, row i is at table[i] + offset
  std::int64_t offset = 0;

  const float* row(std::int64_t i) const { return table ? table[i] + offset : data + i * stride; }
};

/// The same, to be written.
struct HeadOutput {
  float* data = nullptr;
  std::int64_t stride = 0;
  float* const* table = nullptr;
  std::int64_t offset = 0;

  float* row(std::int64_t i) const { return table ? table[i] + offset : data + i * stride; }
};

/// What is done to the scores before the softmax: factor * q k^T + bias + mask.
struct ScoreTerms {
  float factor = 1.0F;
  const float* bias = nullptr;  ///< [queries, keys] or none
  const float* mask = nullptr;  ///< [queries, keys] or none
};

/// Sizes and buffers of one head.
class AttentionPlan {
 public:
  AttentionPlan(std::int64_t queries, std::int64_t keys, std::int64_t d);

  /// Query blocks; how many there are does not depend on threads. Block b begins with query
  /// first_row(b) and holds at most block_rows() of them.
  std::int64_t blocks() const { return blocks_; }
  std::int64_t block_rows() const { return block_rows_; }
  std::int64_t first_row(std::int64_t block) const { return block * queries_ / blocks_; }
  /// Floats of one head's packed keys (and values), and of one worker's scratch.
  std::int64_t packed_key_floats() const;
  std::int64_t packed_value_floats() const;
  std::int64_t scratch_floats() const;
  /// As many zeros as attend_block() and weights_block() need.
  std::int64_t zero_floats() const;

  void pack_keys(HeadRows keys, float* packed) const;
  void pack_values(HeadRows values, float* packed) const;

  /// Rows of query block `block` of the attention's output.
  void attend_block(std::int64_t block, HeadRows queries, const float* packed_keys,
                    const float* packed_values, ScoreTerms terms, const float* zeros,
                    float* scratch, HeadOutput out) const;

  /// Rows of query block `block` of the softmax, `keys` floats a row, side by side.
  void weights_block(std::int64_t block, HeadRows queries, const float* packed_keys,
                     ScoreTerms terms, const float* zeros, float* scratch, float* weights) const;

 private:
  void scale_queries(std::int64_t block, HeadRows queries, float factor, float* scaled) const;
  void add_terms(std::int64_t row, ScoreTerms terms, float* scores) const;

  std::int64_t queries_;
  std::int64_t keys_;
  std::int64_t d_;
  std::int64_t key_block_;   ///< a multiple of a panel, or all keys
  std::int64_t block_rows_;  ///< the most rows of a block
  std::int64_t blocks_;
};

}  // namespace leadsman::ops::simd
