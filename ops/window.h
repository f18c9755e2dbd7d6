// Sliding windows, as convolution and pooling share them.
#pragma once

#include <array>
#include <utility>

#include "leadsman/attributes.h"

namespace leadsman::ops {

struct WindowAttributes {
  std::array<std::int64_t, 2> kernel, stride, dilation;
  std::array<std::int64_t, 4> padding;  ///< top, left, bottom, right

  /// Reads kernel_size, stride (0 stands for the kernel's size), padding and, where the operator
  /// has it, dilation.
  explicit WindowAttributes(const Attributes& attributes);

  /// Height and width of the output: floor((size + padding - extent) / stride) + 1 on each axis;
  /// with ceil_mode the quotient is rounded up, unless the last window would begin in the padding
  /// behind the image (the reference library's rule). Throws Error(kInput) when the window is
  /// larger than the padded image.
  std::pair<std::int64_t, std::int64_t> output_size(std::int64_t h, std::int64_t w,
                                                    bool ceil_mode) const;
};

}  // namespace leadsman::ops
