// A linear layer as one product by the packed weights. One row (a classifier's last layer) is
// bound by memory: its tasks are groups of panels, each read once.
#include <algorithm>

#include "core/threads.h"
#include "ops/linear/linear.h"
#include "ops/simd/matrix.h"
#include "ops/simd/pack.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class MatrixKernel final : public Kernel {
 public:
  MatrixKernel(const OpContext& context, const Epilogue& epilogue)
      : rows_(position_count(context.output)),
        in_(channel_count(context.inputs[0])),
        out_(channel_count(context.output)),
        activation_(epilogue.activation),
        tasks_(rows_, in_, out_),
        packed_(context.weight("weight")->data(),
                context.weight("bias") == nullptr ? nullptr : context.weight("bias")->data(), out_,
                in_, 1) {
    simd::choose_target();
  }

  std::size_t packed_bytes() const override { return packed_.bytes(); }

  void run(const KernelCall& call) const override {
    const float* input = call.inputs[0].data;
    parallel_for(call.threads, tasks_.count(), [&](std::int64_t task, int) {
      const std::int64_t row = task / tasks_.groups * tasks_.strip_rows;
      const std::int64_t panel = task % tasks_.groups * tasks_.group_panels;
      const std::int64_t column = panel * simd::kPanel;
      simd::MatrixCall product;
      product.a = input + row * in_;
      product.a_stride = in_;
      product.depth = in_;
      product.rows = std::min(tasks_.strip_rows, rows_ - row);
      product.panels = packed_.panels() + column * in_;
      product.bias = packed_.bias() + column;
      product.next_panels = simd::next_panels(tasks_, task, call.threads, packed_.panels(), in_);
      product.cols = std::min(tasks_.group_panels * simd::kPanel, out_ - column);
      product.c = call.output.data + row * out_ + column;
      product.c_stride = out_;
      product.residual = call.residual == nullptr ? nullptr : call.residual + row * out_ + column;
      product.activation = activation_;
      simd::matrix_product(product);
    });
  }

 private:
  std::int64_t rows_;
  std::int64_t in_;
  std::int64_t out_;
  Activation activation_;
  simd::MatrixTasks tasks_;
  simd::PackedMatrix packed_;
};

}  // namespace

const Strategy& linear_matrix() {
  static const StrategyOf<MatrixKernel> instance("matrix");
  return instance;
}

}  // namespace leadsman::ops
