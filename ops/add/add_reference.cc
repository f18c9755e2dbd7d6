// Value by value in double.
#include "ops/add/add.h"
#include "ops/rows.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class ReferenceKernel final : public Kernel {
 public:
  ReferenceKernel(const OpContext& context, const Epilogue& epilogue)
      : elements_(context.output.elements()), epilogue_(epilogue) {}

  bool runs_in_place() const override { return true; }

  void run(const KernelCall& call) const override {
    parallel_rows(call.threads, elements_, 1, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t i = begin; i < end; ++i) {
        double sum = static_cast<double>(call.inputs[0].data[i]) +
                     static_cast<double>(call.inputs[1].data[i]);
        if (epilogue_.has_residual) sum += static_cast<double>(call.residual[i]);
        call.output.data[i] = static_cast<float>(activate(epilogue_.activation, sum));
      }
    });
  }

 private:
  std::int64_t elements_;
  Epilogue epilogue_;
};

}  // namespace

const Strategy& add_reference() {
  static const StrategyOf<ReferenceKernel> instance("reference");
  return instance;
}

}  // namespace leadsman::ops
