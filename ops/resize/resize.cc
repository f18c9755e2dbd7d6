#include "ops/resize/resize.h"

#include <algorithm>
#include <array>
#include <cmath>

#include "core/threads.h"
#include "ops/cubic.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

// Weights of up to four neighbouring pixels of an axis.
struct Taps {
  std::array<std::int64_t, 4> at;
  std::array<double, 4> weight;
};

double weight_of(const std::string& interpolation, double distance) {
  if (interpolation == "bicubic") return keys_cubic(distance);
  return std::max(0.0, 1.0 - std::abs(distance));
}

std::vector<Taps> taps_of(std::int64_t size, std::int64_t factor,
                          const std::string& interpolation) {
  std::vector<Taps> all;
  for (std::int64_t i = 0; i < size * factor; ++i) {
    Taps taps{};
    if (interpolation == "nearest") {
      taps.at.fill(i / factor);
      taps.weight = {1.0, 0.0, 0.0, 0.0};
    } else {
      double centre = (static_cast<double>(i) + 0.5) / static_cast<double>(factor) - 0.5;
      // torch's linear interpolation holds the centre at the first pixel; its cubic one does not.
      if (interpolation == "bilinear") centre = std::max(centre, 0.0);
      const auto before = static_cast<std::int64_t>(std::floor(centre));
      for (std::size_t k = 0; k < 4; ++k) {
        const std::int64_t at = before - 1 + static_cast<std::int64_t>(k);
        taps.at[k] = std::clamp<std::int64_t>(at, 0, size - 1);
        taps.weight[k] = weight_of(interpolation, centre - static_cast<double>(at));
      }
    }
    all.push_back(taps);
  }
  return all;
}

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : in_(context.inputs[0]),
        out_(context.output),
        rows_(taps_of(in_[2], out_[2] / std::max<std::int64_t>(1, in_[2]),
                      context.attributes.text("interpolation"))),
        columns_(taps_of(in_[3], out_[3] / std::max<std::int64_t>(1, in_[3]),
                         context.attributes.text("interpolation"))) {}

  std::size_t packed_bytes() const override {
    return (rows_.size() + columns_.size()) * sizeof(Taps);
  }

  void run(const KernelCall& call) const override {
    const std::int64_t channels = in_[1];
    parallel_for(call.threads, out_[0] * out_[2], [&](std::int64_t row, int) {
      const float* image = call.inputs[0].data + row / out_[2] * in_[2] * in_[3] * channels;
      const Taps& y = rows_[static_cast<std::size_t>(row % out_[2])];
      for (std::int64_t j = 0; j < out_[3]; ++j) {
        mix(image, y, columns_[static_cast<std::size_t>(j)],
            call.output.data + (row * out_[3] + j) * channels);
      }
    });
  }

 private:
  void mix(const float* image, const Taps& y, const Taps& x, float* out) const {
    for (std::int64_t c = 0; c < in_[1]; ++c) {
      double sum = 0.0;
      for (std::size_t i = 0; i < 4; ++i) {
        if (y.weight[i] == 0.0) continue;
        for (std::size_t j = 0; j < 4; ++j) {
          if (x.weight[j] == 0.0) continue;
          sum += y.weight[i] * x.weight[j] *
                 static_cast<double>(image[(y.at[i] * in_[3] + x.at[j]) * in_[1] + c]);
        }
      }
      out[c] = static_cast<float>(sum);
    }
  }

  Shape in_, out_;
  std::vector<Taps> rows_, columns_;
};

class Resize final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "resize",
        .meaning = "an image enlarged by whole factors (cubic interpolation: Keys 1981)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {{.name = "factor",
                        .type = AttributeType::kPair,
                        .fallback = {},
                        .meaning = "of height and width",
                        .minimum = 1,
                        .maximum = 64,
                        .choices = {}},
                       {.name = "interpolation",
                        .type = AttributeType::kText,
                        .fallback = std::string("nearest"),
                        .meaning = "how values between pixels are found",
                        .choices = {"nearest", "bilinear", "bicubic"}}},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input", input, {4});
    const auto& factor = context.attributes.integers("factor");
    return {input[0], input[1], input[2] * factor[0], input[3] * factor[1]};
  }

  Cost cost(const OpContext& /*context*/) const override { return {.macs = 0, .reduction = 16}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& resize_operator() {
  static const Resize instance;
  return instance;
}

}  // namespace leadsman::ops
