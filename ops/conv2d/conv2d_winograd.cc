// 3x3 convolution by minimal filtering (winograd.h): tiles of the input are transformed, each
// position of a tile is a matrix product of its own over all tiles, and the sums are transformed
// back.
//
// Where there are many tiles, or groups of channels, a task takes some tiles of one group through
// all three stages in scratch that stays in the second-level cache. Where there are few, the
// weights are what takes time to fetch: each stage is then one parallel loop over all tiles, which
// reads every weight once.
//
// A NaN or an infinity makes all outputs of its tiles NaN, not only those whose window sees it.
#include <algorithm>

#include "core/threads.h"
#include "ops/conv2d/conv2d.h"
#include "ops/conv2d/winograd.h"
#include "ops/conv2d/winograd_weights.h"
#include "ops/simd/matrix.h"
#include "ops/simd/target.h"
#include "ops/simd/winograd.h"

namespace leadsman::ops {
namespace {

// Floats from one position to the next: an odd number of cache lines, so that the positions of one
// tile do not compete for the same sets of the first-level cache.
std::int64_t position_stride(std::int64_t floats) {
  return ((floats + 15) / 16 | 1) * 16;
}

class WinogradKernel final : public Kernel {
 public:
  WinogradKernel(const OpContext& context, const Epilogue& epilogue, int tile)
      : g_(context),
        activation_(epilogue.activation),
        tile_(tile),
        side_(tile + 2),
        tiles_h_((g_.out_h + tile - 1) / tile),
        tiles_w_((g_.out_w + tile - 1) / tile),
        tiles_(g_.n * tiles_h_ * tiles_w_),
        weights_(context, tile),
        zeros_(std::max(g_.c, weights_.part_columns())) {
    simd::choose_target();
    constexpr std::int64_t kFewTiles = 64;
    constexpr std::int64_t kScratchFloats = 80 << 10;
    constexpr std::int64_t kFewestTiles = 12;
    in_phases_ = g_.groups == 1 && tiles_ <= kFewTiles;
    const std::int64_t tile_floats = side_ * side_ * (g_.group_in() + weights_.part_columns());
    const std::int64_t most =
        in_phases_ ? tiles_ : std::max(kFewestTiles, kScratchFloats / tile_floats);
    blocks_ = (tiles_ + most - 1) / std::max<std::int64_t>(1, most);
    block_tiles_ = blocks_ == 0 ? 0 : (tiles_ + blocks_ - 1) / blocks_;
    sum_columns_ = in_phases_ ? g_.out_c : weights_.part_columns();
    input_stride_ = position_stride(block_tiles_ * g_.group_in());
    sums_stride_ = position_stride(block_tiles_ * sum_columns_);
  }

  std::size_t workspace_bytes(int threads) const override {
    return scratch_bytes() * static_cast<std::size_t>(in_phases_ ? 1 : threads);
  }
  std::size_t packed_bytes() const override { return weights_.bytes() + zeros_.bytes(); }

  void run(const KernelCall& call) const override {
    if (in_phases_) {
      run_phases(call);
      return;
    }
    const std::int64_t parts = weights_.parts() / g_.groups;  // of a group
    parallel_for(call.threads, g_.groups * blocks_, [&](std::int64_t task, int worker) {
      const std::int64_t group = task / blocks_;
      const std::int64_t block = task % blocks_;
      float* input = scratch(call, worker);
      float* sums = input + side_ * side_ * input_stride_;
      const std::int64_t first = block * tiles_ / blocks_;
      const std::int64_t count = (block + 1) * tiles_ / blocks_ - first;
      for (std::int64_t i = 0; i < count; ++i) {
        transform_input(call, first + i, group, input + i * g_.group_in());
      }
      for (std::int64_t part = group * parts; part < (group + 1) * parts; ++part) {
        for (std::int64_t p = 0; p < side_ * side_; ++p) {
          multiply(part, p, count, input, sums, weights_.next(part, p));
        }
        for (std::int64_t i = 0; i < count; ++i) {
          transform_output(call, first + i, weights_.first_output(part), weights_.columns(part),
                           sums + i * sum_columns_);
        }
      }
    });
  }

 private:
  std::size_t scratch_bytes() const {
    return simd::aligned_floats_bytes(side_ * side_ * (input_stride_ + sums_stride_));
  }
  float* scratch(const KernelCall& call, int worker) const {
    return reinterpret_cast<float*>(call.workspace +
                                    static_cast<std::size_t>(worker) * scratch_bytes());
  }

  void run_phases(const KernelCall& call) const {
    float* input = scratch(call, 0);
    float* sums = input + side_ * side_ * input_stride_;
    // A tile's transform is a few microseconds.
    parallel_for(call.threads, tiles_, [&](std::int64_t tile, int) {
      transform_input(call, tile, 0, input + tile * g_.c);
    });
    const std::int64_t positions = side_ * side_;
    const std::int64_t products = weights_.parts() * positions;
    parallel_for(call.threads, products, [&](std::int64_t task, int) {
      const std::int64_t part = task / positions;
      const std::int64_t next = task + call.threads;
      multiply(part, task % positions, tiles_, input, sums + weights_.first_output(part),
               next < products ? weights_.at(next / positions, next % positions) : nullptr);
    });
    parallel_for(call.threads, tiles_, [&](std::int64_t tile, int) {
      transform_output(call, tile, 0, g_.out_c, sums + tile * sum_columns_);
    });
  }

  // Place of a tile's first output pixel.
  struct Place {
    std::int64_t n, i, j;
  };
  Place place(std::int64_t tile) const {
    const std::int64_t row = tile / tiles_w_;
    return {row / tiles_h_, row % tiles_h_ * tile_, tile % tiles_w_ * tile_};
  }

  // Input channels of one group.
  void transform_input(const KernelCall& call, std::int64_t tile, std::int64_t group,
                       float* out) const {
    const Place at = place(tile);
    const float* image = call.inputs[0].data + at.n * g_.h * g_.w * g_.c + group * g_.group_in();
    const float* pixels[36];
    const float** pixel = pixels;
    for (std::int64_t u = 0; u < side_; ++u) {
      const std::int64_t y = at.i + u - g_.pad_top;
      for (std::int64_t v = 0; v < side_; ++v) {
        const std::int64_t x = at.j + v - g_.pad_left;
        const bool inside = y >= 0 && y < g_.h && x >= 0 && x < g_.w;
        *pixel++ = inside ? image + (y * g_.w + x) * g_.c : zeros_.data();
      }
    }
    simd::winograd_input(tile_, {pixels, g_.group_in(), out, input_stride_});
  }

  void multiply(std::int64_t part, std::int64_t position, std::int64_t tiles, const float* input,
                float* sums, const float* next) const {
    simd::MatrixCall product;
    product.a = input + position * input_stride_;
    product.a_stride = g_.group_in();
    product.depth = g_.group_in();
    product.rows = tiles;
    product.panels = weights_.at(part, position);
    product.next_panels = next;
    product.bias = zeros_.data();
    product.cols = weights_.columns(part);
    product.c = sums + position * sums_stride_;
    product.c_stride = sum_columns_;
    simd::matrix_product(product);
  }

  // Output channels [column, column + count) of a tile.
  void transform_output(const KernelCall& call, std::int64_t tile, std::int64_t column,
                        std::int64_t count, const float* sums) const {
    const Place at = place(tile);
    const std::int64_t first = ((at.n * g_.out_h + at.i) * g_.out_w + at.j) * g_.out_c + column;
    simd::WinogradOutput output;
    output.sums = sums;
    output.position_stride = sums_stride_;
    output.channels = count;
    output.bias = weights_.bias() + column;
    output.out = call.output.data + first;
    output.row_stride = g_.out_w * g_.out_c;
    output.stride = g_.out_c;
    output.rows = std::min<std::int64_t>(tile_, g_.out_h - at.i);
    output.cols = std::min<std::int64_t>(tile_, g_.out_w - at.j);
    output.residual = call.residual == nullptr ? nullptr : call.residual + first;
    output.activation = activation_;
    simd::winograd_output(tile_, output);
  }

  Conv2dGeometry g_;
  Activation activation_;
  int tile_;
  std::int64_t side_;
  std::int64_t tiles_h_;
  std::int64_t tiles_w_;
  std::int64_t tiles_;  ///< of the whole batch
  WinogradWeights weights_;
  simd::AlignedFloats zeros_;
  bool in_phases_ = false;
  std::int64_t blocks_ = 0;
  std::int64_t block_tiles_ = 0;  ///< at most
  std::int64_t sum_columns_ = 0;  ///< floats of one tile's sums at one position
  std::int64_t input_stride_ = 0;
  std::int64_t sums_stride_ = 0;
};

// What a layer costs, in multiply-adds that take as long. Constants as measured on Zen 3 with AVX2
// (kernels_bench); a wrong one costs time, never more rounding than rounding_growth() says.
double direct_cost(const Conv2dGeometry& g) {
  return 9.0 * static_cast<double>(g.n * g.out_h * g.out_w * g.c * g.group_out());
}

double winograd_cost(const Conv2dGeometry& g, int tile) {
  constexpr double kFewestRows = 6.0;  // a product of fewer rows takes as long
  constexpr double kWeightByte = 2.5;  // transformed weights come from memory, each once
  constexpr double kProduct = 3000.0;  // to begin one, and its ragged edges
  const double transform = tile == 2 ? 150.0 : 390.0;  // of a tile of one channel
  const double positions = (tile + 2) * (tile + 2);
  const auto weights = static_cast<double>(g.c * g.group_out());
  const auto tiles =
      static_cast<double>(g.n * ((g.out_h + tile - 1) / tile) * ((g.out_w + tile - 1) / tile));
  const double products = positions * std::max(kFewestRows, tiles) * weights +
                          positions * static_cast<double>(g.groups) * kProduct;
  return std::max(products, kWeightByte * positions * weights * sizeof(float)) +
         transform * tiles * static_cast<double>(g.c + g.out_c);
}

class WinogradStrategy final : public Strategy {
 public:
  WinogradStrategy(std::string_view name, int tile) : name_(name), tile_(tile) {}
  std::string_view name() const override { return name_; }
  std::string refusal(const OpContext& context) const override {
    const Conv2dGeometry g(context);
    if (context.direct_sums) return "sums are to be direct";
    if (g.kernel_h != 3 || g.kernel_w != 3) return "the kernel is not 3x3";
    if (g.stride_h != 1 || g.stride_w != 1) return "the stride is not 1";
    if (g.dilation_h != 1 || g.dilation_w != 1) return "dilated";
    if (std::min(g.group_in(), g.group_out()) < simd::kMinWinogradChannels) return "few channels";
    if (winograd_cost(g, tile_) >= direct_cost(g)) return "direct sums take less time";
    const int other = 6 - tile_;
    if (winograd_cost(g, other) < winograd_cost(g, tile_)) {
      return "tiles of " + std::to_string(other) + "x" + std::to_string(other) + " take less time";
    }
    return {};
  }
  double rounding_growth() const override {
    return std::max(1.0, tile_ == 2 ? winograd_growth<2>() : winograd_growth<4>());
  }
  std::unique_ptr<Kernel> prepare(const OpContext& context,
                                  const Epilogue& epilogue) const override {
    return std::make_unique<WinogradKernel>(context, epilogue, tile_);
  }

 private:
  std::string_view name_;
  int tile_;
};

}  // namespace

const Strategy& conv2d_winograd2() {
  static const WinogradStrategy instance("winograd2", 2);
  return instance;
}

const Strategy& conv2d_winograd4() {
  static const WinogradStrategy instance("winograd4", 4);
  return instance;
}

}  // namespace leadsman::ops
