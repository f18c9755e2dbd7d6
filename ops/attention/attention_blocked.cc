#include "core/threads.h"
#include "ops/attention/attention.h"
#include "ops/simd/aligned.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

// One image after the other: keys and values of all its heads are packed, then blocks of queries
// of all heads run. The workspace holds the packed keys, the packed values, and each worker's
// scratch.
class BlockedKernel final : public Kernel {
 public:
  explicit BlockedKernel(const OpContext& context)
      : g_(context, true),
        plan_(g_.t, g_.s, g_.d),
        zeros_(plan_.zero_floats()),
        head_bytes_(simd::aligned_floats_bytes(plan_.packed_key_floats()) +
                    simd::aligned_floats_bytes(plan_.packed_value_floats())),
        scratch_bytes_(simd::aligned_floats_bytes(plan_.scratch_floats())) {
    simd::choose_target();
  }

  std::size_t workspace_bytes(int threads) const override {
    return static_cast<std::size_t>(g_.heads) * head_bytes_ +
           static_cast<std::size_t>(threads) * scratch_bytes_;
  }
  std::size_t packed_bytes() const override { return zeros_.bytes(); }

  void run(const KernelCall& call) const override {
    for (std::int64_t image = 0; image < g_.n; ++image) run_image(call, image);
  }

 private:
  using Role = AttentionGeometry::Role;

  float* packed_keys(const KernelCall& call, std::int64_t head) const {
    return reinterpret_cast<float*>(call.workspace + static_cast<std::size_t>(head) * head_bytes_);
  }
  float* packed_values(const KernelCall& call, std::int64_t head) const {
    return reinterpret_cast<float*>(call.workspace + static_cast<std::size_t>(head) * head_bytes_ +
                                    simd::aligned_floats_bytes(plan_.packed_key_floats()));
  }

  void run_image(const KernelCall& call, std::int64_t image) const {
    parallel_for(call.threads, 2 * g_.heads, [&](std::int64_t task, int) {
      const std::int64_t head = task / 2;
      if (task % 2 == 0) {
        plan_.pack_keys(g_.rows(call.inputs, Role::kKeys, image, head), packed_keys(call, head));
      } else {
        plan_.pack_values(g_.rows(call.inputs, Role::kValues, image, head),
                          packed_values(call, head));
      }
    });
    std::byte* scratch = call.workspace + static_cast<std::size_t>(g_.heads) * head_bytes_;
    parallel_for(call.threads, g_.heads * plan_.blocks(), [&](std::int64_t task, int worker) {
      const std::int64_t head = task / plan_.blocks();
      plan_.attend_block(
          task % plan_.blocks(), g_.rows(call.inputs, Role::kQueries, image, head),
          packed_keys(call, head), packed_values(call, head), g_.terms(head), zeros_.data(),
          reinterpret_cast<float*>(scratch + static_cast<std::size_t>(worker) * scratch_bytes_),
          {.data = call.output.data + image * g_.t * g_.c + head * g_.d, .stride = g_.c});
    });
  }

  AttentionGeometry g_;
  simd::AttentionPlan plan_;
  simd::AlignedFloats zeros_;
  std::size_t head_bytes_;
  std::size_t scratch_bytes_;
};

}  // namespace

const Strategy& attention_blocked() {
  static const StrategyOf<BlockedKernel> instance("blocked");
  return instance;
}

}  // namespace leadsman::ops
