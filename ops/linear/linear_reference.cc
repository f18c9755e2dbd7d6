#include "core/threads.h"
#include "ops/linear/linear.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class ReferenceKernel final : public Kernel {
 public:
  ReferenceKernel(const OpContext& context, const Epilogue& epilogue)
      : rows_(position_count(context.output)),
        in_(channel_count(context.inputs[0])),
        out_(channel_count(context.output)),
        weight_(*context.weight("weight")),
        epilogue_(epilogue) {
    if (const Tensor* bias = context.weight("bias")) bias_ = *bias;
  }

  void run(const KernelCall& call) const override {
    parallel_for(call.threads, rows_, [&](std::int64_t row, int) {
      const float* x = call.inputs[0].data + row * in_;
      for (std::int64_t o = 0; o < out_; ++o) {
        const float* w = weight_.data() + o * in_;
        double sum = 0.0;
        for (std::int64_t c = 0; c < in_; ++c) {
          sum += static_cast<double>(w[c]) * static_cast<double>(x[c]);
        }
        if (bias_.data() != nullptr) sum += static_cast<double>(bias_.data()[o]);
        const std::int64_t at = row * out_ + o;
        if (epilogue_.has_residual) sum += static_cast<double>(call.residual[at]);
        call.output.data[at] = static_cast<float>(activate(epilogue_.activation, sum));
      }
    });
  }

 private:
  std::int64_t rows_;
  std::int64_t in_;
  std::int64_t out_;
  Tensor weight_;
  Tensor bias_;
  Epilogue epilogue_;
};

}  // namespace

const Strategy& linear_reference() {
  static const StrategyOf<ReferenceKernel> instance("reference");
  return instance;
}

}  // namespace leadsman::ops
