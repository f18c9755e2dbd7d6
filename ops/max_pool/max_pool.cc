#include "ops/max_pool/max_pool.h"

#include <algorithm>
#include <limits>

#include "core/threads.h"
#include "ops/strategy_of.h"
#include "ops/window.h"

namespace leadsman::ops {
namespace {

// Taps of one window that lie inside the image, on one axis: begin, begin + dilation, ... < end.
struct Taps {
  std::int64_t begin, end;

  Taps(std::int64_t start, std::int64_t kernel, std::int64_t dilation, std::int64_t size)
      : begin(start), end(std::min(start + (kernel - 1) * dilation + 1, size)) {
    if (begin < 0) begin += (dilation - 1 - begin) / dilation * dilation;
  }
};

// A maximum is exact, so that this plain form is the fast one too: channels innermost.
class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : window_(context.attributes), in_(context.inputs[0]), out_(context.output) {}

  void run(const KernelCall& call) const override {
    const std::int64_t channels = in_[1];
    parallel_for(call.threads, out_[0] * out_[2], [&](std::int64_t row, int) {
      const float* image = call.inputs[0].data + row / out_[2] * in_[2] * in_[3] * channels;
      float* out = call.output.data + row * out_[3] * channels;
      const Taps rows(row % out_[2] * window_.stride[0] - window_.padding[0], window_.kernel[0],
                      window_.dilation[0], in_[2]);
      for (std::int64_t j = 0; j < out_[3]; ++j) {
        const Taps columns(j * window_.stride[1] - window_.padding[1], window_.kernel[1],
                           window_.dilation[1], in_[3]);
        for (std::int64_t c = 0; c < channels; c += kBlock) {
          window_max(image, rows, columns, c, out + j * channels);
        }
      }
    });
  }

 private:
  static constexpr std::int64_t kBlock = 64;

  void window_max(const float* image, const Taps& rows, const Taps& columns, std::int64_t first,
                  float* out) const {
    const std::int64_t count = std::min(kBlock, in_[1] - first);
    float largest[kBlock];
    std::fill_n(largest, kBlock, -std::numeric_limits<float>::infinity());
    for (std::int64_t y = rows.begin; y < rows.end; y += window_.dilation[0]) {
      for (std::int64_t x = columns.begin; x < columns.end; x += window_.dilation[1]) {
        const float* pixel = image + (y * in_[3] + x) * in_[1] + first;
        for (std::int64_t c = 0; c < count; ++c) {
          // True for a NaN in `pixel`, false once `largest` holds one.
          const bool wins = !(pixel[c] <= largest[c]) && largest[c] == largest[c];
          largest[c] = wins ? pixel[c] : largest[c];
        }
      }
    }
    std::copy_n(largest, count, out + first);
  }

  WindowAttributes window_;
  Shape in_;
  Shape out_;
};

class MaxPool final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "max_pool",
        .meaning = "largest value under a sliding window (Scherer et al. 2010)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {kernel_size_spec(),
                       pooling_stride_spec(),
                       padding_spec("positions around the image, which never count"),
                       dilation_spec(),
                       {.name = "ceil_mode",
                        .type = AttributeType::kFlag,
                        .fallback = false,
                        .meaning = "a last window that hangs over the edge counts too",
                        .choices = {}}},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {4});
    const WindowAttributes window(context.attributes);
    window.require_padding_below_kernel();
    const auto [h, w] =
        window.output_size(input[2], input[3], context.attributes.flag("ceil_mode"));
    return {input[0], input[1], h, w};
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& max_pool_operator() {
  static const MaxPool instance;
  return instance;
}

}  // namespace leadsman::ops
