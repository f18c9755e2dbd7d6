#include <algorithm>
#include <cmath>

#include "core/threads.h"
#include "ops/group_norm/group_norm.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

// Walks rows of channels three times: for sums, for squares about the mean, for the values. Each
// block of rows leaves what it sums of each channel in double; groups add that up in the order of
// the blocks, so that the number of threads changes nothing.
class RowsKernel final : public Kernel {
 public:
  explicit RowsKernel(const OpContext& context)
      : images_(context.output[0]),
        channels_(context.output[1]),
        area_(context.output[2] * context.output[3]),
        groups_(context.attributes.integer("groups")),
        eps_(context.attributes.number("eps")),
        block_(std::max<std::int64_t>(16, 16384 / std::max<std::int64_t>(1, channels_))),
        blocks_((area_ + block_ - 1) / block_) {
    if (const Tensor* weight = context.weight("weight")) weight_ = *weight;
    if (const Tensor* bias = context.weight("bias")) bias_ = *bias;
  }

  bool runs_in_place() const override { return true; }

  std::size_t workspace_bytes(int /*threads*/) const override {
    const std::int64_t doubles = images_ * (blocks_ * channels_ + groups_);
    return static_cast<std::size_t>(doubles) * sizeof(double) +
           static_cast<std::size_t>(images_ * channels_ * 3) * sizeof(float);
  }

  void run(const KernelCall& call) const override {
    const Space space(*this, call.workspace);
    const float* in = call.inputs[0].data;
    each_block(call.threads, [&](std::int64_t task, std::int64_t row, std::int64_t rows) {
      double* sums = space.sums + task * channels_;
      std::fill_n(sums, channels_, 0.0);
      for (const float* x = in + row * channels_; rows > 0; --rows, x += channels_) {
        for (std::int64_t c = 0; c < channels_; ++c) sums[c] += static_cast<double>(x[c]);
      }
    });
    each_group(call.threads, space, [&](std::int64_t group, std::int64_t first, double mean) {
      const auto centre = static_cast<float>(mean);
      std::fill_n(space.centre + first, channels_ / groups_, centre);
      space.lost[group] = mean - static_cast<double>(centre);
    });
    each_block(call.threads, [&](std::int64_t task, std::int64_t row, std::int64_t rows) {
      double* sums = space.sums + task * channels_;
      const float* centre = space.centre + task / blocks_ * channels_;
      std::fill_n(sums, channels_, 0.0);
      for (const float* x = in + row * channels_; rows > 0; --rows, x += channels_) {
        for (std::int64_t c = 0; c < channels_; ++c) {
          const double distance = static_cast<double>(x[c]) - static_cast<double>(centre[c]);
          sums[c] += distance * distance;
        }
      }
    });
    each_group(call.threads, space, [&](std::int64_t group, std::int64_t first, double square) {
      const double lost = space.lost[group];
      find_maps(space, first, lost, std::max(square - lost * lost, 0.0));
    });
    each_block(call.threads, [&](std::int64_t task, std::int64_t row, std::int64_t rows) {
      const std::int64_t image = task / blocks_ * channels_;
      const float* centre = space.centre + image;
      const float* factor = space.factor + image;
      const float* summand = space.summand + image;
      for (std::int64_t i = row * channels_; rows > 0; --rows, i += channels_) {
        const float* x = in + i;
        float* y = call.output.data + i;
        for (std::int64_t c = 0; c < channels_; ++c) {
          y[c] = (x[c] - centre[c]) * factor[c] + summand[c];
        }
      }
    });
  }

 private:
  struct Space {
    Space(const RowsKernel& kernel, std::byte* memory)
        : sums(reinterpret_cast<double*>(memory)),
          lost(sums + kernel.images_ * kernel.blocks_ * kernel.channels_),
          centre(reinterpret_cast<float*>(lost + kernel.images_ * kernel.groups_)),
          factor(centre + kernel.images_ * kernel.channels_),
          summand(factor + kernel.images_ * kernel.channels_) {}

    double* sums;                      // [N, blocks, C]
    double* lost;                      // [N, groups]: the mean less what float holds of it
    float *centre, *factor, *summand;  // [N, C]
  };

  // body(number of the block, its first row among those of all images, how many rows).
  template <typename Body>
  void each_block(int threads, const Body& body) const {
    parallel_for(threads, images_ * blocks_, [&](std::int64_t task, int) {
      const std::int64_t begin = task % blocks_ * block_;
      body(task, task / blocks_ * area_ + begin, std::min(block_, area_ - begin));
    });
  }

  // body(number of the group, its first channel among those of all images, the mean of its sums).
  template <typename Body>
  void each_group(int threads, const Space& space, const Body& body) const {
    const std::int64_t in_group = channels_ / groups_;
    parallel_for(threads, images_ * groups_, [&](std::int64_t task, int) {
      const std::int64_t image = task / groups_;
      const std::int64_t first = task % groups_ * in_group;
      double total = 0.0;
      for (std::int64_t b = 0; b < blocks_; ++b) {
        const double* sums = space.sums + (image * blocks_ + b) * channels_ + first;
        for (std::int64_t c = 0; c < in_group; ++c) total += sums[c];
      }
      body(task, image * channels_ + first, total / static_cast<double>(area_ * in_group));
    });
  }

  void find_maps(const Space& space, std::int64_t first, double lost, double variance) const {
    const double scale = 1.0 / std::sqrt(variance + eps_);
    for (std::int64_t i = first; i < first + channels_ / groups_; ++i) {
      const std::int64_t c = i % channels_;
      const double factor = weight_.data() ? scale * static_cast<double>(weight_.data()[c]) : scale;
      const double bias = bias_.data() ? static_cast<double>(bias_.data()[c]) : 0.0;
      space.factor[i] = static_cast<float>(factor);
      space.summand[i] = static_cast<float>(bias - lost * factor);
    }
  }

  std::int64_t images_, channels_, area_, groups_;
  double eps_;
  std::int64_t block_, blocks_;  // rows in a block; blocks of an image
  Tensor weight_, bias_;
};

}  // namespace

const Strategy& group_norm_rows() {
  static const StrategyOf<RowsKernel> instance("rows");
  return instance;
}

}  // namespace leadsman::ops
