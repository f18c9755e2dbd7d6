// Depthwise convolution: each channel has filters of its own, one or a few ("multiplier"). Vectors
// run along the channels, tiles along the output row. With a multiplier above one, each filter of
// all channels is computed in turn into a row of scratch, from which the outputs, whose channels
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
    const std::int64_t rows = g_.n * g_.out_h;
    const std::int64_t chunks = (g_.c + chunk_ - 1) / chunk_;
    const std::int64_t strips = (rows + task_rows_ - 1) / task_rows_;
    parallel_for(call.threads, strips * chunks, [&](std::int64_t task, int worker) {
      const std::int64_t first = task / chunks * task_rows_;
      const std::int64_t end = std::min(rows, first + task_rows_);
      for (std::int64_t row = first; row < end; ++row) {
        run_row(call, row, task % chunks * chunk_, worker);
      }
    });
  }

 private:
  std::size_t pointer_bytes() const {
    return aligned_bytes(static_cast<std::size_t>(g_.kernel_h) * sizeof(const float*));
  }
  std::size_t worker_bytes() const {
    return pointer_bytes() + simd::aligned_floats_bytes(multiplier_ == 1 ? 0 : g_.out_w * g_.c);
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

  void run_row(const KernelCall& call, std::int64_t row, std::int64_t channel, int worker) const {
    std::byte* own = call.workspace + static_cast<std::size_t>(worker) * worker_bytes();
    auto* lines = reinterpret_cast<const float**>(own);
    const std::int64_t y0 = row % g_.out_h * g_.stride_h - g_.pad_top;
    const float* image = call.inputs[0].data + row / g_.out_h * g_.h * g_.w * g_.c + channel;
    // Kernel rows within the image lie side by side.
    std::int64_t u_first = 0;
    while (u_first < g_.kernel_h && y0 + u_first * g_.dilation_h < 0) ++u_first;
    std::int64_t u_end = u_first;
    for (; u_end < g_.kernel_h && y0 + u_end * g_.dilation_h < g_.h; ++u_end) {
      lines[u_end - u_first] = image + (y0 + u_end * g_.dilation_h) * g_.w * g_.c;
    }

    simd::DepthwiseRow part;
    part.lines = lines;
    part.kernel_rows = u_end - u_first;
    part.input_w = g_.w;
    part.input_stride = g_.c;
    part.first_x = -g_.pad_left;
    part.kernel_w = g_.kernel_w;
    part.stride = g_.stride_w;
    part.dilation = g_.dilation_w;
    part.weight_stride = g_.c;
    part.channels = std::min(chunk_, g_.c - channel);
    part.out_w = g_.out_w;
    part.out_stride = g_.c;
    part.low = -kInfinity;
    part.high = kInfinity;
    float* out = call.output.data + row * g_.out_w * g_.out_c;
    const float* residual =
        call.residual == nullptr ? nullptr : call.residual + row * g_.out_w * g_.out_c;
    const std::int64_t first_weight = u_first * g_.kernel_w * g_.c;
    if (multiplier_ == 1) {
      part.weights = weights_.data() + first_weight + channel;
      part.bias = bias_.data() + channel;
      part.out = out + channel;
      part.residual = residual == nullptr ? nullptr : residual + channel;
      if (bounds_) {
        part.low = bounds_->low;
        part.high = bounds_->high;
      }
      simd::depthwise_row(part);
      if (bounds_) return;
      for (std::int64_t j = 0; j < g_.out_w; ++j) {
        float* values = out + j * g_.c + channel;
        simd::activate_row(activation_, values, values, part.channels);
      }
      return;
    }
    auto* stage = reinterpret_cast<float*>(own + pointer_bytes());
    part.out = stage;
    for (std::int64_t m = 0; m < multiplier_; ++m) {
      part.weights = weights_.data() + m * taps_ * g_.c + first_weight;
      part.bias = bias_.data() + m * g_.c;
      simd::depthwise_row(part);
      for (std::int64_t i = 0; i < g_.out_w * g_.c; ++i) {
        const std::int64_t to = i * multiplier_ + m;
        out[to] = residual == nullptr ? stage[i] : stage[i] + residual[to];
      }
    }
    simd::activate_row(activation_, out, out, g_.out_w * g_.out_c);
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
