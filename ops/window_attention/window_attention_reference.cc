// The formula of window_attention.h in plain loops and double precision.
#include <algorithm>
#include <cmath>
#include <limits>

#include "core/threads.h"
#include "ops/strategy_of.h"
#include "ops/window_attention/window_attention.h"

namespace leadsman::ops {
namespace {

double dot(const float* a, const float* b, std::int64_t count) {
  double sum = 0.0;
  for (std::int64_t i = 0; i < count; ++i) {
    sum += static_cast<double>(a[i]) * static_cast<double>(b[i]);
  }
  return sum;
}

double norm(const float* a, std::int64_t count) {
  return std::max(std::sqrt(dot(a, a, count)), kSmallestNorm);
}

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context) : g_(context), padding_(padding_row(context)) {
    if (const Tensor* bias = context.weight("position_bias")) bias_ = *bias;
    for (std::int64_t h = 0; h < g_.heads; ++h) factors_.push_back(g_.head_factor(context, h));
  }

  std::size_t workspace_bytes(int threads) const override {
    return static_cast<std::size_t>(threads * g_.tokens) * sizeof(double);
  }

  void run(const KernelCall& call) const override {
    auto* workspace = reinterpret_cast<double*>(call.workspace);
    const std::int64_t of_image = g_.windows() * g_.tokens;
    parallel_for(call.threads, g_.n * of_image, [&](std::int64_t task, int worker) {
      const std::int64_t image = task / of_image;
      const std::int64_t window = task % of_image / g_.tokens;
      const std::int64_t t = task % g_.tokens;
      const std::int64_t at = g_.position(window, t);
      if (at < 0) return;
      const std::int64_t area = g_.height * g_.width;
      for (std::int64_t head = 0; head < g_.heads; ++head) {
        attend(call.inputs[0].data + image * area * 3 * g_.c, window, head, t,
               workspace + worker * g_.tokens,
               call.output.data + (image * area + at) * g_.c + head * g_.d);
      }
    });
  }

 private:
  // q (0), k (1) or v (2) of a token.
  const float* row(const float* image, std::int64_t window, std::int64_t token, int role,
                   std::int64_t head) const {
    const std::int64_t at = g_.position(window, token);
    return (at < 0 ? padding_.data() : image + at * 3 * g_.c) + role * g_.c + head * g_.d;
  }

  double score(const float* image, std::int64_t window, std::int64_t head, std::int64_t t,
               std::int64_t s) const {
    const float* q = row(image, window, t, 0, head);
    const float* k = row(image, window, s, 1, head);
    double value = dot(q, k, g_.d);
    if (g_.cosine) value /= norm(q, g_.d) * norm(k, g_.d);
    value *= factors_[static_cast<std::size_t>(head)];
    if (bias_.data() != nullptr) {
      value += static_cast<double>(bias_.data()[g_.bias_row(t, s) * g_.heads + head]);
    }
    return g_.region(window, t) == g_.region(window, s) ? value : value + kMaskedScore;
  }

  void attend(const float* image, std::int64_t window, std::int64_t head, std::int64_t t, double* p,
              float* out) const {
    double largest = -std::numeric_limits<double>::infinity();
    for (std::int64_t s = 0; s < g_.tokens; ++s) {
      p[s] = score(image, window, head, t, s);
      largest = std::max(largest, p[s]);
    }
    double sum = 0.0;
    for (std::int64_t s = 0; s < g_.tokens; ++s) sum += p[s] = std::exp(p[s] - largest);
    for (std::int64_t e = 0; e < g_.d; ++e) {
      double mixed = 0.0;
      for (std::int64_t s = 0; s < g_.tokens; ++s) {
        mixed += p[s] * static_cast<double>(row(image, window, s, 2, head)[e]);
      }
      out[e] = static_cast<float>(mixed / sum);
    }
  }

  WindowGeometry g_;
  std::vector<float> padding_;
  std::vector<double> factors_;
  Tensor bias_;
};

}  // namespace

const Strategy& window_attention_reference() {
  static const StrategyOf<ReferenceKernel> instance("reference");
  return instance;
}

}  // namespace leadsman::ops
