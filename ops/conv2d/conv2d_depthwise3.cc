// Depthwise convolution with the window that nearly all networks use, 3x3 of stride 1 or 2. A task
// is some output rows by a chunk of channels; chunks are cut first, as they share no input.
#include <algorithm>
#include <array>

#include "core/threads.h"
#include "ops/conv2d/conv2d.h"
#include "ops/simd/aligned.h"
#include "ops/simd/depthwise3.h"
#include "ops/simd/target.h"

namespace leadsman::ops {
namespace {

constexpr std::int64_t kMostRows = 16;  // of a task

class Depthwise3Kernel final : public Kernel {
 public:
  Depthwise3Kernel(const OpContext& context, const Epilogue& epilogue)
      : g_(context), activation_(epilogue.activation), weights_(9 * g_.c), bias_(g_.c) {
    simd::choose_target();
    const float* weight = context.weight("weight")->data();
    for (std::int64_t c = 0; c < g_.c; ++c) {
      for (std::int64_t tap = 0; tap < 9; ++tap) {
        weights_.data()[tap * g_.c + c] = weight[c * 9 + tap];
      }
    }
    if (const Tensor* bias = context.weight("bias")) {
      std::copy_n(bias->data(), g_.c, bias_.data());
    }
    // The inputs of a tile, and those of its neighbour, stay in the first-level cache.
    constexpr std::int64_t kMostChannels = 160;
    constexpr std::int64_t kFewestChannels = 32;
    constexpr std::int64_t kEnoughTasks = 16;
    constexpr std::int64_t kTaskMacs = 50000;
    const std::int64_t macs = 9 * g_.n * g_.out_h * g_.out_w * g_.c;
    const std::int64_t wanted = std::clamp<std::int64_t>(macs / kTaskMacs, 1, kEnoughTasks);
    task_rows_ = kMostRows;
    while (task_rows_ > 2 * simd::kDepthwise3Rows &&
           count_strips() * ((g_.c + kMostChannels - 1) / kMostChannels) < wanted) {
      task_rows_ /= 2;
    }
    const std::int64_t chunks =
        std::max((g_.c + kMostChannels - 1) / kMostChannels,
                 std::min(g_.c / kFewestChannels, (wanted + count_strips() - 1) / count_strips()));
    chunk_ = ((g_.c + chunks - 1) / std::max<std::int64_t>(1, chunks) + 15) / 16 * 16;
  }

  std::size_t packed_bytes() const override { return weights_.bytes() + bias_.bytes(); }

  void run(const KernelCall& call) const override {
    const std::int64_t chunks = count_chunks();
    const std::int64_t image_strips = (g_.out_h + task_rows_ - 1) / task_rows_;
    parallel_for(call.threads, count_strips() * chunks, [&](std::int64_t task, int) {
      const std::int64_t strip = task / chunks;
      run_strip(call, strip / image_strips, strip % image_strips * task_rows_,
                task % chunks * chunk_);
    });
  }

 private:
  // Chunks of chunk_ channels; what is left and too short for one of its own joins the last.
  std::int64_t count_chunks() const {
    return std::max<std::int64_t>(1, (g_.c + chunk_ - simd::kMinDepthwise3Channels) / chunk_);
  }
  std::int64_t count_strips() const { return g_.n * ((g_.out_h + task_rows_ - 1) / task_rows_); }

  void run_strip(const KernelCall& call, std::int64_t n, std::int64_t row,
                 std::int64_t channel) const {
    const bool last = channel / chunk_ + 1 == count_chunks();
    simd::Depthwise3 part;
    part.rows = std::min(task_rows_, g_.out_h - row);
    std::array<const float*, (kMostRows - 1) * 2 + 3> lines;
    for (std::int64_t i = 0; i < (part.rows - 1) * g_.stride_h + 3; ++i) {
      const std::int64_t y = row * g_.stride_h + i - g_.pad_top;
      const bool inside = y >= 0 && y < g_.h;
      lines[static_cast<std::size_t>(i)] =
          inside ? call.inputs[0].data + (n * g_.h + y) * g_.w * g_.c + channel : nullptr;
    }
    part.lines = lines.data();
    part.input_w = g_.w;
    part.input_stride = g_.c;
    part.first_x = -g_.pad_left;
    part.stride = static_cast<int>(g_.stride_w);
    part.weights = weights_.data() + channel;
    part.weight_stride = g_.c;
    part.bias = bias_.data() + channel;
    part.channels = last ? g_.c - channel : chunk_;
    const std::int64_t first = (n * g_.out_h + row) * g_.out_w * g_.c + channel;
    part.out = call.output.data + first;
    part.out_row = g_.out_w * g_.c;
    part.out_stride = g_.c;
    part.out_w = g_.out_w;
    part.residual = call.residual == nullptr ? nullptr : call.residual + first;
    part.activation = activation_;
    simd::depthwise3(part);
  }

  Conv2dGeometry g_;
  Activation activation_;
  simd::AlignedFloats weights_;  ///< [9][channels]
  simd::AlignedFloats bias_;
  std::int64_t chunk_ = 0;
  std::int64_t task_rows_ = 0;
};

class Depthwise3Strategy final : public Strategy {
 public:
  std::string_view name() const override { return "depthwise3"; }
  std::string refusal(const OpContext& context) const override {
    const Conv2dGeometry g(context);
    if (g.groups != g.c || g.out_c != g.c) return "not one filter a channel";
    if (g.kernel_h != 3 || g.kernel_w != 3) return "the kernel is not 3x3";
    if (g.stride_h != g.stride_w || g.stride_h > 2) return "the stride is not 1 or 2";
    if (g.dilation_h != 1 || g.dilation_w != 1) return "dilated";
    if (!simd::depthwise3_takes_width(g.out_w)) return "a narrow output";
    if (g.c < simd::kMinDepthwise3Channels) return "few channels";
    return {};
  }
  std::unique_ptr<Kernel> prepare(const OpContext& context,
                                  const Epilogue& epilogue) const override {
    return std::make_unique<Depthwise3Kernel>(context, epilogue);
  }
};

}  // namespace

const Strategy& conv2d_depthwise3() {
  static const Depthwise3Strategy instance;
  return instance;
}

}  // namespace leadsman::ops
