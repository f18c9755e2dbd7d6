#include "ops/window.h"

#include <string>

#include "leadsman/error.h"

namespace leadsman::ops {
namespace {

std::int64_t output_extent(const char* axis, std::int64_t size, std::int64_t kernel,
                           std::int64_t stride, std::int64_t dilation, std::int64_t before,
                           std::int64_t after, bool ceil_mode) {
  const std::int64_t extent = (kernel - 1) * dilation + 1;
  const std::int64_t room = size + before + after - extent;
  if (size < 1 || room < 0) {
    throw_input(std::string("a window of ") + axis + " " + std::to_string(extent) +
                " does not fit in an input of " + std::to_string(size) + " plus padding " +
                std::to_string(before) + " and " + std::to_string(after));
  }
  std::int64_t count = room / stride + 1;
  if (ceil_mode && room % stride != 0 && count * stride < size + before) ++count;
  return count;
}

AttributeSpec size_spec(std::string_view name, AttributeType type,
                        const std::optional<AttributeValue>& fallback, std::string_view meaning,
                        double minimum) {
  return {.name = name,
          .type = type,
          .fallback = fallback,
          .meaning = meaning,
          .minimum = minimum,
          .maximum = 65535,
          .choices = {}};
}

}  // namespace

AttributeSpec kernel_size_spec() {
  return size_spec("kernel_size", AttributeType::kPair, {}, "size of the window", 1);
}
AttributeSpec stride_spec() {
  return size_spec("stride", AttributeType::kPair, std::int64_t{1}, "step of the window", 1);
}
AttributeSpec pooling_stride_spec() {
  return size_spec("stride", AttributeType::kPair, std::int64_t{0},
                   "step of the window; 0: the kernel's size", 0);
}
AttributeSpec padding_spec(std::string_view meaning) {
  return size_spec("padding", AttributeType::kPadding, std::int64_t{0}, meaning, 0);
}
AttributeSpec dilation_spec() {
  return size_spec("dilation", AttributeType::kPair, std::int64_t{1},
                   "distance between the window's taps", 1);
}

WindowAttributes::WindowAttributes(const Attributes& attributes) : dilation{1, 1} {
  const auto& kernel_size = attributes.integers("kernel_size");
  const auto& stride_pair = attributes.integers("stride");
  const auto& pads = attributes.integers("padding");
  for (std::size_t i = 0; i < 2; ++i) {
    kernel[i] = kernel_size[i];
    stride[i] = stride_pair[i] == 0 ? kernel[i] : stride_pair[i];
    if (attributes.has("dilation")) dilation[i] = attributes.integers("dilation")[i];
  }
  for (std::size_t i = 0; i < 4; ++i) padding[i] = pads[i];
}

std::pair<std::int64_t, std::int64_t> WindowAttributes::output_size(std::int64_t h, std::int64_t w,
                                                                    bool ceil_mode) const {
  return {output_extent("height", h, kernel[0], stride[0], dilation[0], padding[0], padding[2],
                        ceil_mode),
          output_extent("width", w, kernel[1], stride[1], dilation[1], padding[1], padding[3],
                        ceil_mode)};
}

void WindowAttributes::require_padding_below_kernel() const {
  for (std::size_t side = 0; side < 4; ++side) {
    const std::int64_t size = kernel[side % 2];
    if (padding[side] < size) continue;
    throw_input("padding of " + std::to_string(padding[side]) + " is not below the kernel's " +
                (side % 2 == 0 ? "height " : "width ") + std::to_string(size));
  }
}

}  // namespace leadsman::ops
