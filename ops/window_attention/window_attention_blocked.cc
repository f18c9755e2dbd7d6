// A window's rows are read where they lie: tables say where. A task is one head of one window.
// Biases and masks are spread to a score each when the layer is prepared, which is refused where
// that would take more memory than any published model's (24 x 24 positions and 48 heads: 64 MB).
#include <algorithm>
#include <cmath>

#include "core/threads.h"
#include "ops/simd/aligned.h"
#include "ops/simd/attention.h"
#include "ops/simd/reduce.h"
#include "ops/simd/target.h"
#include "ops/window_attention/window_attention.h"

namespace leadsman::ops {
namespace {

class BlockedKernel final : public Kernel {
 public:
  explicit BlockedKernel(const OpContext& context)
      : g_(context),
        plan_(g_.tokens, g_.tokens, g_.d),
        zeros_(plan_.zero_floats()),
        padding_(padding_row(context)) {
    simd::choose_target();
    for (std::int64_t h = 0; h < g_.heads; ++h) {
      factors_.push_back(static_cast<float>(g_.head_factor(context, h)));
    }
    if (const Tensor* bias = context.weight("position_bias")) spread_bias(*bias);
    find_positions();
    find_masks();
  }

  std::size_t workspace_bytes(int threads) const override {
    return static_cast<std::size_t>(threads) * worker_bytes();
  }

  std::size_t packed_bytes() const override {
    return zeros_.bytes() + (padding_.size() + bias_.size() + masks_.size()) * sizeof(float) +
           positions_.size() * sizeof(std::int32_t);
  }

  void run(const KernelCall& call) const override {
    const std::int64_t of_image = g_.windows() * g_.heads;
    parallel_for(call.threads, g_.n * of_image, [&](std::int64_t task, int worker) {
      const std::int64_t image = task / of_image;
      const std::int64_t area = g_.height * g_.width;
      run_head(call.inputs[0].data + image * area * 3 * g_.c, task % of_image / g_.heads,
               task % g_.heads, call.workspace + static_cast<std::size_t>(worker) * worker_bytes(),
               call.output.data + image * area * g_.c);
    });
  }

 private:
  // bias_[head][query][key].
  void spread_bias(const Tensor& table) {
    bias_.resize(static_cast<std::size_t>(g_.heads * g_.tokens * g_.tokens));
    auto next = bias_.begin();
    for (std::int64_t head = 0; head < g_.heads; ++head) {
      for (std::int64_t t = 0; t < g_.tokens; ++t) {
        for (std::int64_t s = 0; s < g_.tokens; ++s) {
          *next++ = table.data()[g_.bias_row(t, s) * g_.heads + head];
        }
      }
    }
  }

  void find_positions() {
    for (std::int64_t window = 0; window < g_.windows(); ++window) {
      for (std::int64_t i = 0; i < g_.tokens; ++i) {
        positions_.push_back(static_cast<std::int32_t>(g_.position(window, i)));
      }
    }
  }

  // Windows at the end of the lower edge, of the right one and of both: mask_of() says which.
  void find_masks() {
    mask_begin_.fill(-1);
    for (std::int64_t window = 0; window < g_.windows(); ++window) {
      if (!g_.is_divided(window)) continue;
      std::int64_t& begin = mask_begin_[mask_of(window)];
      if (begin >= 0) continue;
      begin = static_cast<std::int64_t>(masks_.size());
      for (std::int64_t t = 0; t < g_.tokens; ++t) {
        for (std::int64_t s = 0; s < g_.tokens; ++s) {
          const bool apart = g_.region(window, t) != g_.region(window, s);
          masks_.push_back(apart ? static_cast<float>(kMaskedScore) : 0.0F);
        }
      }
    }
  }

  std::size_t mask_of(std::int64_t window) const {
    return (window / g_.columns == g_.rows - 1 ? 1U : 0U) +
           (window % g_.columns == g_.columns - 1 ? 2U : 0U);
  }

  // A worker's memory: row tables of input and output, packed keys and values, q and k divided by
  // their norms, scratch, and a row for results of the padding.
  std::size_t table_bytes() const {
    constexpr std::int64_t kFloatsInPointer = sizeof(const float*) / 4;
    return simd::aligned_floats_bytes(2 * g_.tokens * kFloatsInPointer);
  }
  std::size_t worker_bytes() const {
    return table_bytes() + simd::aligned_floats_bytes(plan_.packed_key_floats()) +
           simd::aligned_floats_bytes(plan_.packed_value_floats()) +
           simd::aligned_floats_bytes(g_.cosine ? 2 * g_.tokens * g_.d : 0) +
           simd::aligned_floats_bytes(plan_.scratch_floats()) + simd::aligned_floats_bytes(g_.c);
  }

  static float* take(std::byte*& memory, std::int64_t floats) {
    auto* taken = reinterpret_cast<float*>(memory);
    memory += simd::aligned_floats_bytes(floats);
    return taken;
  }

  void run_head(const float* image, std::int64_t window, std::int64_t head, std::byte* memory,
                float* out) const {
    auto** in_rows = reinterpret_cast<const float**>(memory);
    auto** out_rows = reinterpret_cast<float**>(memory) + g_.tokens;
    memory += table_bytes();
    float* keys = take(memory, plan_.packed_key_floats());
    float* values = take(memory, plan_.packed_value_floats());
    float* divided = take(memory, g_.cosine ? 2 * g_.tokens * g_.d : 0);
    float* scratch = take(memory, plan_.scratch_floats());
    float* dropped = take(memory, g_.c);
    for (std::int64_t i = 0; i < g_.tokens; ++i) {
      const std::int64_t at = positions_[static_cast<std::size_t>(window * g_.tokens + i)];
      in_rows[i] = at < 0 ? padding_.data() : image + at * 3 * g_.c;
      out_rows[i] = at < 0 ? dropped : out + at * g_.c;
    }
    const auto rows = [&](std::int64_t role) {
      return simd::HeadRows{.table = in_rows, .offset = role * g_.c + head * g_.d};
    };
    simd::HeadRows queries = rows(0);
    simd::HeadRows unpacked = rows(1);
    if (g_.cosine) {
      queries = divide_by_norms(queries, divided);
      unpacked = divide_by_norms(unpacked, divided + g_.tokens * g_.d);
    }
    plan_.pack_keys(unpacked, keys);
    plan_.pack_values(rows(2), values);
    const std::int64_t area = g_.tokens * g_.tokens;
    const simd::ScoreTerms terms{
        .factor = factors_[static_cast<std::size_t>(head)],
        .bias = bias_.empty() ? nullptr : bias_.data() + head * area,
        .mask = g_.is_divided(window) ? masks_.data() + mask_begin_[mask_of(window)] : nullptr};
    for (std::int64_t block = 0; block < plan_.blocks(); ++block) {
      plan_.attend_block(block, queries, keys, values, terms, zeros_.data(), scratch,
                         {.table = out_rows, .offset = head * g_.d});
    }
  }

  simd::HeadRows divide_by_norms(simd::HeadRows rows, float* out) const {
    for (std::int64_t i = 0; i < g_.tokens; ++i) {
      const float* x = rows.row(i);
      double squares = 0.0;
      for (std::int64_t e = 0; e < g_.d; ++e) {
        squares += static_cast<double>(x[e]) * static_cast<double>(x[e]);
      }
      const double norm = std::max(std::sqrt(squares), kSmallestNorm);
      simd::scale_row(x, out + i * g_.d, g_.d, static_cast<float>(1.0 / norm));
    }
    return {.data = out, .stride = g_.d};
  }

  WindowGeometry g_;
  simd::AttentionPlan plan_;
  simd::AlignedFloats zeros_;
  std::vector<float> padding_;
  std::vector<float> factors_;
  std::vector<float> bias_;
  std::vector<float> masks_;
  std::array<std::int64_t, 4> mask_begin_{};
  std::vector<std::int32_t> positions_;
};

class Blocked final : public Strategy {
 public:
  std::string_view name() const override { return "blocked"; }

  std::string refusal(const OpContext& context) const override {
    constexpr double kMostEntries = 1 << 26;  // 256 MB
    const WindowGeometry g(context);
    const auto tokens = static_cast<double>(g.tokens);
    const double biases = context.weight("position_bias") ? static_cast<double>(g.heads) : 0.0;
    const double masks = g.shift_down + g.shift_right > 0 ? 3.0 : 0.0;
    const double places = static_cast<double>(g.rows) * static_cast<double>(g.columns) * tokens;
    if ((biases + masks) * tokens * tokens + places <= kMostEntries) return {};
    return "tables of windows of " + std::to_string(g.window_height) + " x " +
           std::to_string(g.window_width) + " positions would take over 256 MB";
  }

  std::unique_ptr<Kernel> prepare(const OpContext& context,
                                  const Epilogue& /*epilogue*/) const override {
    return std::make_unique<BlockedKernel>(context);
  }
};

}  // namespace

const Strategy& window_attention_blocked() {
  static const Blocked instance;
  return instance;
}

}  // namespace leadsman::ops
