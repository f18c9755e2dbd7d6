// Depthwise convolution: each channel has filters of its own, one or a few ("multiplier"). Vectors
// run along the channels, tiles along the output row. With a multiplier above one, each filter of
// all channels is computed in turn into a tile of scratch, from which the outputs, whose channels
// are interleaved, are put together.
#include <algorithm>
#include <limits>
#include <optional>

#include "core/threads.h"
#include "ops/conv2d/conv2d.h"
#include "ops/simd/activation.h"
#include "ops/simd/aligned.h"
#include "ops/simd/depthwise.h"
#include "ops/simd/target.h"

namespace leadsman::ops {
namespace {

constexpr float kInfinity = std::numeric_limits<float>::infinity();

class DepthwiseKernel final : public Kernel {
 public:
  DepthwiseKernel(const OpContext& context, const Epilogue& epilogue)
      : g_(context),
        multiplier_(g_.out_c / g_.c),
        taps_(g_.kernel_h * g_.kernel_w),
        activation_(epilogue.activation),
        bounds_(simd::activation_bounds(activation_)),
        weights_(multiplier_ * taps_ * g_.c),
        bias_(g_.out_c) {
    simd::choose_target();
    // Filter m of channel c is output channel c * multiplier + m.
    const float* weight = context.weight("weight")->data();
    const Tensor* bias = context.weight("bias");
    for (std::int64_t o = 0; o < g_.out_c; ++o) {
      const std::int64_t c = o / multiplier_;
      const std::int64_t m = o % multiplier_;
      for (std::int64_t tap = 0; tap < taps_; ++tap) {
        weights_.data()[(m * taps_ + tap) * g_.c + c] = weight[o * taps_ + tap];
      }
      if (bias != nullptr) bias_.data()[m * g_.c + c] = bias->data()[o];
    }
    plan_tasks();
  }

  std::size_t workspace_bytes(int threads) const override {
    return static_cast<std::size_t>(threads) * worker_bytes();
  }
  std::size_t packed_bytes() const override { return weights_.bytes() + bias_.bytes(); }

  void run(const KernelCall& call) const override {
    const simd::DepthwiseTiling tiling(g_.out_w, chunk_, g_.kernel_w, g_.stride_w, g_.dilation_w);
    const std::int64_t rows = g_.n * g_.out_h;
    const std::int64_t chunks = (g_.c + chunk_ - 1) / chunk_;
    const std::int64_t strips = (rows + task_rows_ - 1) / task_rows_;
    parallel_for(call.threads, strips * chunks, [&](std::int64_t task, int worker) {
      const std::int64_t first = task / chunks * task_rows_;
      const std::int64_t end = std::min(rows, first + task_rows_);
      for (std::int64_t row = first; row < end; ++row) {
        for (std::int64_t j = 0; j < g_.out_w; j += tiling.pixels()) {
          run_tile(call, tiling, row, j, task % chunks * chunk_, worker);
        }
      }
    });
  }

 private:
  std::size_t pointer_bytes() const {
    return simd::aligned_bytes(
        static_cast<std::size_t>(g_.kernel_h *
                                 simd::DepthwiseTiling::max_columns(g_.kernel_w, g_.stride_w)) *
        sizeof(const float*));
  }
  std::size_t worker_bytes() const {
    const std::int64_t staged = multiplier_ == 1 ? 0 : simd::DepthwiseTiling::kMaxPixels * g_.c;
    return pointer_bytes() + simd::aligned_floats_bytes(staged);
  }

  // Tasks are some rows by a chunk of channels, large enough to be worth handing out.
  void plan_tasks() {
    constexpr std::int64_t kTaskMacs = 100000;
    constexpr std::int64_t kEnoughTasks = 16;
    const std::int64_t rows = g_.n * g_.out_h;
    const std::int64_t row_macs = std::max<std::int64_t>(1, g_.out_w * taps_ * g_.out_c);
    task_rows_ = std::clamp<std::int64_t>(kTaskMacs / row_macs, 1, std::max<std::int64_t>(1, rows));
    chunk_ = g_.c;
    if (multiplier_ > 1) return;
    while (rows / task_rows_ * (g_.c / chunk_) < kEnoughTasks && chunk_ % 64 == 0 &&
           task_rows_ * row_macs / (g_.c / chunk_) > kTaskMacs) {
      chunk_ /= 2;
    }
  }

  void run_tile(const KernelCall& call, const simd::DepthwiseTiling& tiling, std::int64_t row,
                std::int64_t j, std::int64_t channel, int worker) const {
    std::byte* own = call.workspace + static_cast<std::size_t>(worker) * worker_bytes();
    auto* pointers = reinterpret_cast<const float**>(own);
    const std::int64_t pixels = std::min(tiling.pixels(), g_.out_w - j);
    const std::int64_t y0 = row % g_.out_h * g_.stride_h - g_.pad_top;
    const std::int64_t x0 = j * g_.stride_w - g_.pad_left;
    const float* image = call.inputs[0].data + row / g_.out_h * g_.h * g_.w * g_.c + channel;
    // Kernel rows within the image lie side by side.
    std::int64_t u_first = 0;
    while (u_first < g_.kernel_h && y0 + u_first * g_.dilation_h < 0) ++u_first;
    std::int64_t u_end = u_first;
    while (u_end < g_.kernel_h && y0 + u_end * g_.dilation_h < g_.h) ++u_end;
    for (std::int64_t u = u_first; u < u_end; ++u) {
      const float* line = image + (y0 + u * g_.dilation_h) * g_.w * g_.c;
      for (std::int64_t i = 0; i < tiling.columns(); ++i) {
        const std::int64_t x = x0 + tiling.x(i);
        const bool reads = x >= 0 && x < g_.w && tiling.used(i, pixels);
        pointers[(u - u_first) * tiling.columns() + i] = reads ? line + x * g_.c : nullptr;
      }
    }

    simd::DepthwiseTile tile;
    tile.inputs = pointers;
    tile.kernel_rows = u_end - u_first;
    tile.weight_stride = g_.c;
    tile.channels = std::min(chunk_, g_.c - channel);
    tile.pixels = pixels;
    const std::int64_t at = (row * g_.out_w + j) * g_.out_c;
    float* out = call.output.data + at;
    const float* residual = call.residual == nullptr ? nullptr : call.residual + at;
    if (multiplier_ == 1) {
      tile.weights = weights_.data() + u_first * g_.kernel_w * g_.c + channel;
      tile.bias = bias_.data() + channel;
      tile.out = out + channel;
      tile.out_stride = g_.c;
      tile.residual = residual == nullptr ? nullptr : residual + channel;
      tile.low = bounds_ ? bounds_->low : -kInfinity;
      tile.high = bounds_ ? bounds_->high : kInfinity;
      tile.run(tiling);
      if (bounds_) return;
      for (std::int64_t p = 0; p < pixels; ++p) {
        float* values = out + p * g_.c + channel;
        simd::activate_row(activation_, values, values, tile.channels);
      }
      return;
    }
    auto* stage = reinterpret_cast<float*>(own + pointer_bytes());
    tile.out = stage;
    tile.out_stride = g_.c;
    tile.low = -kInfinity;
    tile.high = kInfinity;
    for (std::int64_t m = 0; m < multiplier_; ++m) {
      tile.weights = weights_.data() + (m * taps_ + u_first * g_.kernel_w) * g_.c;
      tile.bias = bias_.data() + m * g_.c;
      tile.run(tiling);
      for (std::int64_t i = 0; i < pixels * g_.c; ++i) {
        const std::int64_t to = i * multiplier_ + m;
        out[to] = residual == nullptr ? stage[i] : stage[i] + residual[to];
      }
    }
    simd::activate_row(activation_, out, out, pixels * g_.out_c);
  }

  Conv2dGeometry g_;
  std::int64_t multiplier_;
  std::int64_t taps_;
  Activation activation_;
  std::optional<simd::Bounds> bounds_;
  simd::AlignedFloats weights_;  ///< [multiplier][taps][channels]
  simd::AlignedFloats bias_;     ///< [multiplier][channels]
  std::int64_t task_rows_ = 1;
  std::int64_t chunk_ = 1;
};

class Depthwise final : public Strategy {
 public:
  std::string_view name() const override { return "depthwise"; }
  std::string refusal(const OpContext& context) const override {
    const std::int64_t channels = context.inputs[0][1];
    const std::int64_t groups = context.attributes.integer("groups");
    if (groups != channels) {
      return std::to_string(groups) + " groups of " + std::to_string(channels) +
             " channels: not one channel a group";
    }
    if (channels == 1) return "a single channel is a plain convolution";
    return {};
  }
  std::unique_ptr<Kernel> prepare(const OpContext& context,
                                  const Epilogue& epilogue) const override {
    return std::make_unique<DepthwiseKernel>(context, epilogue);
  }
};

}  // namespace

const Strategy& conv2d_depthwise() {
  static const Depthwise instance;
  return instance;
}

}  // namespace leadsman::ops
