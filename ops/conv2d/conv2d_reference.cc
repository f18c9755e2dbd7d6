// The formula of conv2d.h, read off in plain loops; the oracle of every other convolution.
#include "core/threads.h"
#include "leadsman/tensor.h"
#include "ops/conv2d/conv2d.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class ReferenceKernel final : public Kernel {
 public:
  ReferenceKernel(const OpContext& context, const Epilogue& epilogue)
      : g_(context), weight_(*context.weight("weight")), epilogue_(epilogue) {
    if (const Tensor* bias = context.weight("bias")) bias_ = *bias;
  }

  void run(const KernelCall& call) const override {
    parallel_for(call.threads, g_.n * g_.out_h, [&](std::int64_t row, int) {
      for (std::int64_t j = 0; j < g_.out_w; ++j) {
        for (std::int64_t o = 0; o < g_.out_c; ++o) {
          const std::int64_t at = (row * g_.out_w + j) * g_.out_c + o;
          double sum = window_sum(call.inputs[0].data, row / g_.out_h, o, row % g_.out_h, j);
          if (bias_.data() != nullptr) sum += static_cast<double>(bias_.data()[o]);
          if (epilogue_.has_residual) sum += static_cast<double>(call.residual[at]);
          call.output.data[at] = static_cast<float>(activate(epilogue_.activation, sum));
        }
      }
    });
  }

 private:
  double window_sum(const float* x, std::int64_t n, std::int64_t o, std::int64_t i,
                    std::int64_t j) const {
    const std::int64_t first_channel = o / g_.group_out() * g_.group_in();
    const float* w = weight_.data() + o * g_.group_in() * g_.kernel_h * g_.kernel_w;
    double sum = 0.0;
    for (std::int64_t u = 0; u < g_.kernel_h; ++u) {
      const std::int64_t y = i * g_.stride_h + u * g_.dilation_h - g_.pad_top;
      if (y < 0 || y >= g_.h) continue;
      for (std::int64_t v = 0; v < g_.kernel_w; ++v) {
        const std::int64_t z = j * g_.stride_w + v * g_.dilation_w - g_.pad_left;
        if (z < 0 || z >= g_.w) continue;
        const float* pixel = x + ((n * g_.h + y) * g_.w + z) * g_.c + first_channel;
        for (std::int64_t c = 0; c < g_.group_in(); ++c) {
          sum += static_cast<double>(w[(c * g_.kernel_h + u) * g_.kernel_w + v]) *
                 static_cast<double>(pixel[c]);
        }
      }
    }
    return sum;
  }

  Conv2dGeometry g_;
  Tensor weight_;
  Tensor bias_;
  Epilogue epilogue_;
};

}  // namespace

const Strategy& conv2d_reference() {
  static const StrategyOf<ReferenceKernel> instance("reference");
  return instance;
}

}  // namespace leadsman::ops
