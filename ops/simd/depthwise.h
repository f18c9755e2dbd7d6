// One tile of a depthwise convolution: some neighbouring output pixels of one row, all channels.
//
//   out[p, c] = bounds(bias[c] + sum over u, v of weights[u, v, c] * input(u, p, v)[c] +
//                      residual[p, c])
//
// Inputs come as pointers to pixels (their channels side by side); null stands for a pixel in the
// padding, whose terms are left out. Sums run over u, then v. Vectors run along the channels; the
// last one is moved back to end with the last channel, so some values may be stored twice, with
// the same bits.
#pragma once

#include <cstdint>

namespace leadsman::ops::simd {

/// How pixels are pointed at, which depends on the window along the row and on the instruction set
/// in use (the results do not). Cheap: made anew in every run.
class DepthwiseTiling {
 public:
  /// For rows of `out_w` pixels. `dilation` is that along the row.
  DepthwiseTiling(std::int64_t out_w, std::int64_t channels, std::int64_t kernel_w,
                  std::int64_t stride, std::int64_t dilation);

  /// Pixels of a tile; the last one of a row may have fewer.
  std::int64_t pixels() const { return special_pixels_ == 0 ? kGeneralPixels : special_pixels_; }
  /// Pointers for each kernel row, and the most that any instruction set wants.
  std::int64_t columns() const;
  static std::int64_t max_columns(std::int64_t kernel_w, std::int64_t stride);
  /// Where pointer `index` points, counted in pixels from the tile's first window.
  std::int64_t x(std::int64_t index) const;
  /// Whether any of the tile's first `pixels` pixels reads it.
  bool used(std::int64_t index, std::int64_t pixels) const;

  /// Pixels of a tile of any window.
  static constexpr std::int64_t kGeneralPixels = 8;
  static constexpr std::int64_t kMaxPixels = 14;

 private:
  friend struct DepthwiseTile;
  std::int64_t kernel_w_, stride_, dilation_;
  std::int64_t special_pixels_;  ///< 0: a window without code of its own
};

struct DepthwiseTile {
  const float* const* inputs = nullptr;  ///< [kernel_rows][columns()]
  std::int64_t kernel_rows = 0;
  const float* weights = nullptr;  ///< [kernel_rows][kernel_w][weight_stride]
  std::int64_t weight_stride = 0;
  const float* bias = nullptr;
  std::int64_t channels = 0;
  float* out = nullptr;  ///< pixel p at out + p * out_stride
  std::int64_t out_stride = 0;
  const float* residual = nullptr;  ///< as out, or null
  std::int64_t pixels = 0;          ///< valid ones
  float low = 0.0F;
  float high = 0.0F;

  void run(const DepthwiseTiling& tiling) const;
};

}  // namespace leadsman::ops::simd
