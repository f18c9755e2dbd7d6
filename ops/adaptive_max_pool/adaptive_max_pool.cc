#include "ops/adaptive_max_pool/adaptive_max_pool.h"

#include "ops/adaptive_window.h"
#include "ops/simd/pixel_grid.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

class RowsKernel final : public AdaptiveKernel {
 public:
  explicit RowsKernel(const OpContext& context) : AdaptiveKernel(context, simd::max_of_pixels) {
    simd::choose_target();
  }
};

class ReferenceKernel final : public AdaptiveKernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : AdaptiveKernel(context, ops::max_of_pixels) {}
};

class AdaptiveMaxPool final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "adaptive_max_pool",
        .meaning = "largest values that bring an image of any size to a given one",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {output_size_spec()},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    return adaptive_output_shape(context);
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return rows_and_reference<RowsKernel, ReferenceKernel>();
  }
};

}  // namespace

const Operator& adaptive_max_pool_operator() {
  static const AdaptiveMaxPool instance;
  return instance;
}

}  // namespace leadsman::ops
