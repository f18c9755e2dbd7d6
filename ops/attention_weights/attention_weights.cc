#include "ops/attention_weights/attention_weights.h"

#include <array>

#include "core/threads.h"
#include "ops/attention/attention.h"
#include "ops/simd/aligned.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

using Role = AttentionGeometry::Role;

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context) : g_(context, false) {}

  std::size_t workspace_bytes(int threads) const override {
    return static_cast<std::size_t>(threads) * static_cast<std::size_t>(g_.s) * sizeof(double);
  }

  void run(const KernelCall& call) const override {
    auto* workspace = reinterpret_cast<double*>(call.workspace);
    parallel_for(call.threads, g_.n * g_.heads * g_.t, [&](std::int64_t task, int worker) {
      const std::int64_t head = task / g_.t % g_.heads;
      const std::int64_t image = task / g_.t / g_.heads;
      double* p = workspace + worker * g_.s;
      reference_attention_row(g_, g_.rows(call.inputs, Role::kQueries, image, head),
                              g_.rows(call.inputs, Role::kKeys, image, head), head, task % g_.t, p);
      float* out = call.output.data + (image * g_.t + task % g_.t) * g_.s * g_.heads + head;
      for (std::int64_t s = 0; s < g_.s; ++s) out[s * g_.heads] = static_cast<float>(p[s]);
    });
  }

 private:
  AttentionGeometry g_;
};

// As the blocked kernel of attention, up to the probabilities. A task computes one block of
// queries, head after head, because the heads lie side by side in the output.
class BlockedKernel final : public Kernel {
 public:
  explicit BlockedKernel(const OpContext& context)
      : g_(context, false),
        plan_(g_.t, g_.s, g_.d),
        zeros_(plan_.zero_floats()),
        head_bytes_(simd::aligned_floats_bytes(plan_.packed_key_floats())),
        scratch_bytes_(simd::aligned_floats_bytes(plan_.scratch_floats())),
        stage_bytes_(simd::aligned_floats_bytes(plan_.block_rows() * g_.s)) {
    simd::choose_target();
  }

  std::size_t workspace_bytes(int threads) const override {
    return static_cast<std::size_t>(g_.heads) * head_bytes_ +
           static_cast<std::size_t>(threads) * (scratch_bytes_ + stage_bytes_);
  }
  std::size_t packed_bytes() const override { return zeros_.bytes(); }

  void run(const KernelCall& call) const override {
    for (std::int64_t image = 0; image < g_.n; ++image) {
      parallel_for(call.threads, g_.heads, [&](std::int64_t head, int) {
        plan_.pack_keys(g_.rows(call.inputs, Role::kKeys, image, head), packed(call, head));
      });
      parallel_for(call.threads, plan_.blocks(), [&](std::int64_t block, int worker) {
        for (std::int64_t head = 0; head < g_.heads; ++head) {
          run_block(call, image, head, block, worker);
        }
      });
    }
  }

 private:
  float* packed(const KernelCall& call, std::int64_t head) const {
    return reinterpret_cast<float*>(call.workspace + static_cast<std::size_t>(head) * head_bytes_);
  }

  void run_block(const KernelCall& call, std::int64_t image, std::int64_t head, std::int64_t block,
                 int worker) const {
    std::byte* own = call.workspace + static_cast<std::size_t>(g_.heads) * head_bytes_ +
                     static_cast<std::size_t>(worker) * (scratch_bytes_ + stage_bytes_);
    auto* stage = reinterpret_cast<float*>(own + scratch_bytes_);
    plan_.weights_block(block, g_.rows(call.inputs, Role::kQueries, image, head),
                        packed(call, head), g_.terms(head), zeros_.data(),
                        reinterpret_cast<float*>(own), stage);
    const std::int64_t first = plan_.first_row(block);
    const std::int64_t count = (plan_.first_row(block + 1) - first) * g_.s;
    float* out = call.output.data + (image * g_.t + first) * g_.s * g_.heads + head;
    for (std::int64_t i = 0; i < count; ++i) out[i * g_.heads] = stage[i];
  }

  AttentionGeometry g_;
  simd::AttentionPlan plan_;
  simd::AlignedFloats zeros_;
  std::size_t head_bytes_;
  std::size_t scratch_bytes_;
  std::size_t stage_bytes_;
};

class AttentionWeights final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "attention_weights",
        .meaning = "the probabilities of multi-head attention (Vaswani et al. 2017)",
        .min_inputs = 1,
        .max_inputs = 2,
        .attributes = attention_attributes(),
        .weights = {attention_bias_spec()},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const AttentionGeometry g(context, false);
    return {g.n, g.heads, g.t, g.s};
  }

  Cost cost(const OpContext& context) const override {
    const AttentionGeometry g(context, false);
    return {.macs = g.n * g.heads * g.t * g.s * g.d, .reduction = g.d + g.s};
  }

  std::span<const Strategy* const> strategies() const override {
    static const std::array<const Strategy*, 2> all{&attention_weights_blocked(),
                                                    &attention_weights_reference()};
    return all;
  }
};

}  // namespace

const Strategy& attention_weights_blocked() {
  static const StrategyOf<BlockedKernel> instance("blocked");
  return instance;
}

const Strategy& attention_weights_reference() {
  static const StrategyOf<ReferenceKernel> instance("reference");
  return instance;
}

const Operator& attention_weights_operator() {
  static const AttentionWeights instance;
  return instance;
}

}  // namespace leadsman::ops
