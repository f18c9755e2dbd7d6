// Sliding windows, as convolution and pooling share them.
#pragma once

#include <array>
#include <utility>

#include "leadsman/attributes.h"
#include "ops/operator.h"

namespace leadsman::ops {

/// The attributes that WindowAttributes reads, as contracts declare them. A pooling window must not
/// fit into the padding alone, so poolings call require_padding_below_kernel().
AttributeSpec kernel_size_spec();
AttributeSpec stride_spec();          ///< of convolutions: 1 when absent
AttributeSpec pooling_stride_spec();  ///< the kernel's size when absent or 0
AttributeSpec padding_spec(std::string_view meaning);
AttributeSpec dilation_spec();

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

  /// Throws Error(kInput) when a side's padding is as large as the kernel: some windows would hold
  /// no value of the image.
  void require_padding_below_kernel() const;
};

}  // namespace leadsman::ops
