#include "ops/adaptive_window.h"

#include <algorithm>

#include "core/threads.h"
#include "leadsman/error.h"

namespace leadsman::ops {
namespace {

std::int64_t window_begin(std::int64_t i, std::int64_t in, std::int64_t out) {
  return i * in / out;
}
std::int64_t window_end(std::int64_t i, std::int64_t in, std::int64_t out) {
  return ((i + 1) * in + out - 1) / out;
}

}  // namespace

std::int64_t longest_window(std::int64_t in, std::int64_t out) {
  return std::min(in, in % out == 0 ? in / out : in / out + 2);
}

AttributeSpec output_size_spec() {
  return {.name = "output_size",
          .type = AttributeType::kPair,
          .fallback = {},
          .meaning = "height and width of the output",
          .minimum = 1,
          .maximum = 65535,
          .choices = {}};
}

Shape adaptive_output_shape(const OpContext& context) {
  const Shape& input = context.inputs[0];
  require_rank("input", input, {4});
  if (input[2] < 1 || input[3] < 1) {
    throw_input("input has shape " + input.to_string() + ", which has no positions");
  }
  const auto& size = context.attributes.integers("output_size");
  return {input[0], input[1], size[0], size[1]};
}

AdaptiveKernel::AdaptiveKernel(const OpContext& context, MaxOfPixels reduce)
    : in_(context.inputs[0]), out_(context.output), reduce_(reduce) {}

// Tasks are an output row and a block of channels: the usual output has one row.
void AdaptiveKernel::run(const KernelCall& call) const {
  constexpr std::int64_t kBlock = 64;
  const std::int64_t blocks = (in_[1] + kBlock - 1) / kBlock;
  parallel_for(call.threads, out_[0] * out_[2] * blocks, [&](std::int64_t task, int) {
    const std::int64_t row = task / blocks;
    const std::int64_t c = task % blocks * kBlock;
    reduce_row(call.inputs[0].data + row / out_[2] * in_[2] * in_[3] * in_[1] + c, row % out_[2],
               std::min(kBlock, in_[1] - c), call.output.data + row * out_[3] * in_[1] + c);
  });
}

void AdaptiveKernel::reduce_row(const float* image, std::int64_t i, std::int64_t channels,
                                float* out) const {
  const std::int64_t top = window_begin(i, in_[2], out_[2]);
  const std::int64_t rows = window_end(i, in_[2], out_[2]) - top;
  for (std::int64_t j = 0; j < out_[3]; ++j) {
    const std::int64_t left = window_begin(j, in_[3], out_[3]);
    reduce_({.first = image + (top * in_[3] + left) * in_[1],
             .rows = rows,
             .columns = window_end(j, in_[3], out_[3]) - left,
             .row_stride = in_[3] * in_[1],
             .column_stride = in_[1]},
            channels, out + j * in_[1]);
  }
}

}  // namespace leadsman::ops
