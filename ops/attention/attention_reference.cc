// The formula of attention.h in plain loops and double precision.
#include <algorithm>
#include <cmath>
#include <limits>

#include "core/threads.h"
#include "ops/attention/attention.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context) : g_(context, true) {}

  std::size_t workspace_bytes(int threads) const override {
    return static_cast<std::size_t>(threads) * static_cast<std::size_t>(g_.s) * sizeof(double);
  }

  void run(const KernelCall& call) const override {
    auto* workspace = reinterpret_cast<double*>(call.workspace);
    parallel_for(call.threads, g_.n * g_.heads * g_.t, [&](std::int64_t task, int worker) {
      const std::int64_t t = task % g_.t;
      const std::int64_t head = task / g_.t % g_.heads;
      const std::int64_t image = task / g_.t / g_.heads;
      double* p = workspace + worker * g_.s;
      using Role = AttentionGeometry::Role;
      reference_attention_row(g_, g_.rows(call.inputs, Role::kQueries, image, head),
                              g_.rows(call.inputs, Role::kKeys, image, head), head, t, p);
      const simd::HeadRows values = g_.rows(call.inputs, Role::kValues, image, head);
      float* out = call.output.data + (image * g_.t + t) * g_.c + head * g_.d;
      for (std::int64_t e = 0; e < g_.d; ++e) {
        double sum = 0.0;
        for (std::int64_t s = 0; s < g_.s; ++s) {
          sum += p[s] * static_cast<double>(values.row(s)[e]);
        }
        out[e] = static_cast<float>(sum);
      }
    });
  }

 private:
  AttentionGeometry g_;
};

}  // namespace

void reference_attention_row(const AttentionGeometry& g, simd::HeadRows queries,
                             simd::HeadRows keys, std::int64_t head, std::int64_t t,
                             double* probabilities) {
  const float* bias = g.head_bias(head);
  double largest = -std::numeric_limits<double>::infinity();
  for (std::int64_t s = 0; s < g.s; ++s) {
    double score = 0.0;
    for (std::int64_t e = 0; e < g.d; ++e) {
      score += static_cast<double>(queries.row(t)[e]) * static_cast<double>(keys.row(s)[e]);
    }
    probabilities[s] = score * static_cast<double>(g.scale);
    if (bias != nullptr) probabilities[s] += static_cast<double>(bias[t * g.s + s]);
    largest = std::max(largest, probabilities[s]);
  }
  double sum = 0.0;
  for (std::int64_t s = 0; s < g.s; ++s) {
    probabilities[s] = std::exp(probabilities[s] - largest);
    sum += probabilities[s];
  }
  for (std::int64_t s = 0; s < g.s; ++s) probabilities[s] /= sum;
}

const Strategy& attention_reference() {
  static const StrategyOf<ReferenceKernel> instance("reference");
  return instance;
}

}  // namespace leadsman::ops
