// NaNs and infinities among weights.
#pragma once

#include <cstdint>
#include <span>
#include <string>
#include <vector>

#include "leadsman/tensor.h"

namespace leadsman::loaders {

/// Index of the first value that is NaN or infinite; -1 when there is none.
std::int64_t find_non_finite(std::span<const float> values);

struct NonFinite {
  std::size_t tensor = 0;   ///< the first tensor that has one
  std::int64_t index = -1;  ///< in it, the first such value; -1: there is none in any tensor
};
/// Looks through all tensors, on up to `threads` threads. What it finds does not depend on them.
NonFinite find_non_finite(const std::vector<const Tensor*>& tensors, int threads);

/// "[3, 0, 1, 2]": the place of a value by its index in logical order.
std::string index_text(const Shape& shape, std::int64_t index);
/// "the element at [3, 0, 1, 2] is NaN". Requires a value there that is not finite.
std::string non_finite_text(const Tensor& tensor, std::int64_t index);

}  // namespace leadsman::loaders
