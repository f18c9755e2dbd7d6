#include "ops/rows.h"

namespace leadsman::ops {
namespace {

template <typename Function>
void map_row(float* values, std::int64_t count, const Function& function) {
  for (std::int64_t i = 0; i < count; ++i) values[i] = function(values[i]);
}

}  // namespace

// Comparisons are written so that NaN stays NaN.
void activate_row(Activation activation, float* values, std::int64_t count) {
  switch (activation.kind) {
    case ActivationKind::kNone:
      return;
    case ActivationKind::kRelu:
      return map_row(values, count, [](float x) { return x < 0.0F ? 0.0F : x; });
    case ActivationKind::kRelu6:
      return map_row(values, count, [](float x) {
        const float low = x < 0.0F ? 0.0F : x;
        return low > 6.0F ? 6.0F : low;
      });
    case ActivationKind::kLeakyRelu:
      return map_row(values, count, [slope = activation.parameter](float x) {
        const float scaled = x * slope;
        return x < 0.0F ? scaled : x;
      });
    default:
      return map_row(values, count, [activation](float x) {
        return static_cast<float>(activate(activation, static_cast<double>(x)));
      });
  }
}

}  // namespace leadsman::ops
