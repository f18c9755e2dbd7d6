// In float, then the activation while the block is still in the first-level cache.
#include "ops/add/add.h"
#include "ops/rows.h"
#include "ops/simd/activation.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class RowsKernel final : public Kernel {
 public:
  RowsKernel(const OpContext& context, const Epilogue& epilogue)
      : elements_(context.output.elements()), epilogue_(epilogue) {
    simd::choose_target();
  }

  bool runs_in_place() const override { return true; }

  void run(const KernelCall& call) const override {
    parallel_rows(call.threads, elements_, 1, [&](std::int64_t begin, std::int64_t end) {
      const float* a = call.inputs[0].data;
      const float* b = call.inputs[1].data;
      float* y = call.output.data;
      // One pass, because each summand may be the very input that is overwritten.
      if (epilogue_.has_residual) {
        for (std::int64_t i = begin; i < end; ++i) y[i] = a[i] + b[i] + call.residual[i];
      } else {
        for (std::int64_t i = begin; i < end; ++i) y[i] = a[i] + b[i];
      }
      if (epilogue_.activation.kind == ActivationKind::kNone) return;
      simd::activate_row(epilogue_.activation, y + begin, y + begin, end - begin);
    });
  }

 private:
  std::int64_t elements_;
  Epilogue epilogue_;
};

}  // namespace

const Strategy& add_rows() {
  static const StrategyOf<RowsKernel> instance("rows");
  return instance;
}

}  // namespace leadsman::ops
