// Windows of poolings that bring an image of any size to a given one, as torch's adaptive poolings
// divide it: window i of `out` covers [floor(i * in / out), ceil((i + 1) * in / out)).
#pragma once

#include <cstdint>

#include "ops/operator.h"
#include "ops/pixel_grid.h"

namespace leadsman::ops {

/// The attribute `output_size`, and the shape that it asks for; throws Error(kInput) for an input
/// without positions.
AttributeSpec output_size_spec();
Shape adaptive_output_shape(const OpContext& context);

/// The most positions that a window covers along an axis.
std::int64_t longest_window(std::int64_t in, std::int64_t out);

/// Reduces every window, for each channel.
class AdaptiveKernel : public Kernel {
 public:
  AdaptiveKernel(const OpContext& context, MaxOfPixels reduce);
  void run(const KernelCall& call) const override;

 private:
  void reduce_row(const float* image, std::int64_t i, std::int64_t channels, float* out) const;

  Shape in_;
  Shape out_;
  MaxOfPixels reduce_;
};

}  // namespace leadsman::ops
