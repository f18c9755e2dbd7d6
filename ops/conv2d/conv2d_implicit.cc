// Convolution as a matrix product whose left side is never built: the product reads, for each
// output pixel, its window in pieces ("taps") through a table of pointers made anew for each
// strip of pixels. Taps in the padding point at a buffer of zeros. Any stride, dilation, padding
// and number of groups; each group is a product of its own.
//
// A tap is the channels of one input pixel. Where the pixels of a kernel row lie side by side in
// memory (no dilation, no groups) and none is in the padding, the whole kernel row is one tap,
// which makes few and long sums of what would be many short ones. Images of few channels (the
// first layer) are copied once with zeros at their sides to get there.
#include <algorithm>

#include "core/threads.h"
#include "ops/conv2d/conv2d.h"
#include "ops/simd/matrix.h"
#include "ops/simd/pack.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

// With this many channels or fewer the copy with zeros at the sides pays.
constexpr std::int64_t kFewChannels = 8;

// How a window is cut into taps.
enum class Taps {
  kWholeImage,  ///< 1x1, stride 1, no padding: the image is the left side as it lies
  kPixels,      ///< one tap a pixel
  kRows,        ///< one tap a kernel row, none of which reaches into the padding at the sides
  kPaddedRows,  ///< the same after a copy with zeros at the sides
};

Taps choose_taps(const Conv2dGeometry& g) {
  const bool one = g.kernel_h == 1 && g.kernel_w == 1;
  const bool padded = g.pad_top > 0 || g.pad_left > 0 || g.pad_bottom > 0 || g.pad_right > 0;
  if (one && g.stride_h == 1 && g.stride_w == 1 && !padded) return Taps::kWholeImage;
  if (one || g.groups > 1 || g.dilation_w > 1) return Taps::kPixels;
  const bool reaches = g.pad_left > 0 || (g.out_w - 1) * g.stride_w + g.kernel_w > g.w;
  if (!reaches) return Taps::kRows;
  return g.c <= kFewChannels ? Taps::kPaddedRows : Taps::kPixels;
}

class ImplicitKernel final : public Kernel {
 public:
  ImplicitKernel(const OpContext& context, const Epilogue& epilogue)
      : g_(context),
        activation_(epilogue.activation),
        mode_(choose_taps(g_)),
        by_rows_(mode_ == Taps::kRows || mode_ == Taps::kPaddedRows),
        taps_(by_rows_ ? g_.kernel_h : g_.kernel_h * g_.kernel_w),
        tap_floats_(by_rows_ ? g_.kernel_w * g_.c : g_.group_in()),
        rows_(g_.n * g_.out_h * g_.out_w),
        padded_w_(g_.w + g_.pad_left + g_.pad_right),
        tasks_(rows_, taps_ * tap_floats_, g_.group_out()),
        zeros_(tap_floats_) {
    simd::choose_target();
    const float* weight = context.weight("weight")->data();
    const Tensor* bias = context.weight("bias");
    const std::int64_t group_weights = g_.group_out() * g_.group_in() * g_.kernel_h * g_.kernel_w;
    for (std::int64_t group = 0; group < g_.groups; ++group) {
      packed_.emplace_back(weight + group * group_weights,
                           bias == nullptr ? nullptr : bias->data() + group * g_.group_out(),
                           g_.group_out(), g_.group_in(), g_.kernel_h * g_.kernel_w);
    }
  }

  std::size_t workspace_bytes(int threads) const override {
    return copy_bytes() + static_cast<std::size_t>(threads) * table_bytes();
  }
  std::size_t packed_bytes() const override {
    std::size_t bytes = zeros_.bytes();
    for (const simd::PackedMatrix& each : packed_) bytes += each.bytes();
    return bytes;
  }

  void run(const KernelCall& call) const override {
    const float* image = call.inputs[0].data;
    if (mode_ == Taps::kPaddedRows) image = copy_padded(call);
    std::byte* tables = call.workspace + copy_bytes();
    parallel_for(call.threads, g_.groups * tasks_.count(), [&](std::int64_t task, int worker) {
      const std::int64_t group = task / tasks_.count();
      const std::int64_t strip = task % tasks_.count() / tasks_.groups;
      const std::int64_t panels = task % tasks_.groups * tasks_.group_panels;
      const std::int64_t row = strip * tasks_.strip_rows;
      const std::int64_t column = panels * simd::kPanel;
      const auto& packed = packed_[static_cast<std::size_t>(group)];

      simd::MatrixCall product;
      product.taps = taps_;
      product.depth = tap_floats_;
      product.rows = std::min(tasks_.strip_rows, rows_ - row);
      if (mode_ == Taps::kWholeImage) {
        product.a = image + row * g_.c + group * g_.group_in();
        product.a_stride = g_.c;
      } else {
        auto* table = reinterpret_cast<const float**>(tables + static_cast<std::size_t>(worker) *
                                                                   table_bytes());
        fill_table(image + group * g_.group_in(), row, product.rows, table);
        product.table = table;
        product.table_stride = tasks_.strip_rows;
      }
      product.panels = packed.panels() + column * taps_ * tap_floats_;
      product.bias = packed.bias() + column;
      product.next_panels = simd::next_panels(tasks_, task % tasks_.count(), call.threads,
                                              packed.panels(), taps_ * tap_floats_);
      product.cols = std::min(tasks_.group_panels * simd::kPanel, g_.group_out() - column);
      const std::int64_t at = row * g_.out_c + group * g_.group_out() + column;
      product.c = call.output.data + at;
      product.c_stride = g_.out_c;
      product.residual = call.residual == nullptr ? nullptr : call.residual + at;
      product.activation = activation_;
      simd::matrix_product(product);
    });
  }

 private:
  std::size_t copy_bytes() const {
    if (mode_ != Taps::kPaddedRows) return 0;
    return simd::aligned_floats_bytes(g_.n * g_.h * padded_w_ * g_.c);
  }
  std::size_t table_bytes() const {
    if (mode_ == Taps::kWholeImage) return 0;
    return aligned_bytes(static_cast<std::size_t>(taps_ * tasks_.strip_rows) *
                         sizeof(const float*));
  }

  const float* copy_padded(const KernelCall& call) const {
    auto* copy = reinterpret_cast<float*>(call.workspace);
    constexpr std::int64_t kTaskRows = 32;
    const std::int64_t rows = g_.n * g_.h;
    parallel_for(call.threads, (rows + kTaskRows - 1) / kTaskRows, [&](std::int64_t task, int) {
      const std::int64_t end = std::min(rows, (task + 1) * kTaskRows);
      for (std::int64_t row = task * kTaskRows; row < end; ++row) {
        float* to = std::fill_n(copy + row * padded_w_ * g_.c, g_.pad_left * g_.c, 0.0F);
        to = std::copy_n(call.inputs[0].data + row * g_.w * g_.c, g_.w * g_.c, to);
        std::fill_n(to, g_.pad_right * g_.c, 0.0F);
      }
    });
    return copy;
  }

  // table[tap * strip_rows + r]: where tap `tap` of output pixel first + r begins.
  void fill_table(const float* image, std::int64_t first, std::int64_t count,
                  const float** table) const {
    for (std::int64_t r = 0; r < count;) {
      const std::int64_t row = (first + r) / g_.out_w;
      const std::int64_t j = (first + r) % g_.out_w;
      const std::int64_t some = std::min(count - r, g_.out_w - j);
      fill_line(image, row / g_.out_h, row % g_.out_h, j, some, table + r);
      r += some;
    }
  }

  // The same for `count` pixels from column j of output row i of image n.
  void fill_line(const float* image, std::int64_t n, std::int64_t i, std::int64_t j,
                 std::int64_t count, const float** table) const {
    const bool padded = mode_ == Taps::kPaddedRows;
    const std::int64_t width = padded ? padded_w_ : g_.w;
    const std::int64_t pad_left = padded ? 0 : g_.pad_left;
    const std::int64_t taps_w = by_rows_ ? 1 : g_.kernel_w;
    const std::int64_t step = g_.stride_w * g_.c;
    for (std::int64_t u = 0; u < g_.kernel_h; ++u) {
      const std::int64_t y = i * g_.stride_h + u * g_.dilation_h - g_.pad_top;
      const bool inside = y >= 0 && y < g_.h;
      const float* line = image + ((n * g_.h + (inside ? y : 0)) * width) * g_.c;
      for (std::int64_t v = 0; v < taps_w; ++v) {
        const std::int64_t x = j * g_.stride_w + v * g_.dilation_w - pad_left;
        // Pixels [begin, end) read the image, those before and behind them the padding.
        const std::int64_t begin = !inside  ? count
                                   : x >= 0 ? 0
                                            : std::min(count, (g_.stride_w - 1 - x) / g_.stride_w);
        const std::int64_t end =
            x >= width ? begin : std::clamp((width - 1 - x) / g_.stride_w + 1, begin, count);
        std::fill_n(table, begin, zeros_.data());
        std::int64_t at = (x + begin * g_.stride_w) * g_.c;
        for (std::int64_t r = begin; r < end; ++r, at += step) table[r] = line + at;
        std::fill_n(table + end, count - end, zeros_.data());
        table += tasks_.strip_rows;
      }
    }
  }

  Conv2dGeometry g_;
  Activation activation_;
  Taps mode_;
  bool by_rows_;
  std::int64_t taps_;
  std::int64_t tap_floats_;
  std::int64_t rows_;  ///< output pixels of the whole batch
  std::int64_t padded_w_;
  simd::MatrixTasks tasks_;
  simd::AlignedFloats zeros_;
  std::vector<simd::PackedMatrix> packed_;  ///< one a group
};

}  // namespace

const Strategy& conv2d_implicit() {
  static const StrategyOf<ImplicitKernel> instance("implicit");
  return instance;
}

}  // namespace leadsman::ops
