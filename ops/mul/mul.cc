#include "ops/mul/mul.h"

#include <algorithm>
#include <vector>

#include "leadsman/error.h"
#include "ops/rows.h"
#include "ops/simd/channelwise.h"
#include "ops/simd/reduce.h"
#include "ops/simd/target.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

// One value for each channel of an item; features have one position, so theirs are all values.
Shape by_channel(const Shape& full) {
  if (full.rank() == 4) return {full[0], full[1], 1, 1};
  return full.rank() == 3 ? full.with(1, 1) : full;
}

// One value for each position.
Shape by_position(const Shape& full) {
  return full.with(channel_axis(full), 1);
}

// The shapes that a second factor may have, each once.
std::vector<Shape> factor_shapes(const Shape& full) {
  std::vector<Shape> shapes{full};
  if (full.rank() < 2 || full.rank() > 4) return shapes;
  for (const Shape& shape : {by_channel(full), by_position(full)}) {
    if (std::ranges::find(shapes, shape) == shapes.end()) shapes.push_back(shape);
  }
  return shapes;
}

bool takes(const Shape& full, const Shape& factors) {
  const std::vector<Shape> shapes = factor_shapes(full);
  return std::ranges::find(shapes, factors) != shapes.end();
}

// How one row is multiplied: by another, and by one factor. A float product is the exact one
// rounded once, so all forms agree.
struct RowProducts {
  void (*multiply)(const float* a, const float* b, float* out, std::int64_t count);
  void (*scale)(const float* in, float* out, std::int64_t count, float factor);
};

void multiply_plainly(const float* a, const float* b, float* out, std::int64_t count) {
  for (std::int64_t i = 0; i < count; ++i) out[i] = a[i] * b[i];
}

void scale_plainly(const float* in, float* out, std::int64_t count, float factor) {
  for (std::int64_t i = 0; i < count; ++i) out[i] = in[i] * factor;
}

class MulKernel : public Kernel {
 public:
  MulKernel(const OpContext& context, RowProducts products) : products_(products) {
    const Shape& full = context.inputs[0];
    const Shape& factors = context.inputs[1];
    if (full == factors) {
      rows_ = full.elements();
      return;
    }
    rows_ = position_count(full);
    channels_ = channel_count(full);
    repeated_ = factors == by_channel(full) ? Repeated::kOverPositions : Repeated::kOverChannels;
    rows_in_item_ = rows_ / std::max<std::int64_t>(1, full[0]);
  }

  bool runs_in_place() const override { return true; }

  void run(const KernelCall& call) const override {
    const float* a = call.inputs[0].data;
    const float* b = call.inputs[1].data;
    float* y = call.output.data;
    parallel_rows(call.threads, rows_, channels_, [&](std::int64_t begin, std::int64_t end) {
      if (repeated_ == Repeated::kNot) {
        products_.multiply(a + begin, b + begin, y + begin, end - begin);
        return;
      }
      for (std::int64_t row = begin; row < end; ++row) {
        const std::int64_t first = row * channels_;
        if (repeated_ == Repeated::kOverPositions) {
          products_.multiply(a + first, b + row / rows_in_item_ * channels_, y + first, channels_);
        } else {
          products_.scale(a + first, y + first, channels_, b[row]);
        }
      }
    });
  }

 private:
  enum class Repeated { kNot, kOverPositions, kOverChannels };

  RowProducts products_;
  Repeated repeated_ = Repeated::kNot;
  std::int64_t rows_ = 0;
  std::int64_t channels_ = 1;
  std::int64_t rows_in_item_ = 1;
};

class RowsKernel final : public MulKernel {
 public:
  explicit RowsKernel(const OpContext& context)
      : MulKernel(context, {simd::multiply_row, simd::scale_row}) {
    simd::choose_target();
  }
};

class ReferenceKernel final : public MulKernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : MulKernel(context, {multiply_plainly, scale_plainly}) {}
};

class Mul final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "mul",
        .meaning =
            "product of two tensors of one shape, or of one and a factor for each of its channels "
            "(Hu et al. 2018) or positions (Woo et al. 2018)",
        .min_inputs = 2,
        .max_inputs = 2,
        .attributes = {},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& a = context.inputs[0];
    const Shape& b = context.inputs[1];
    if (takes(a, b)) return a;
    std::string message = "input 2 has shape " + b.to_string() + ", expected " + a.to_string();
    if (takes(b, a)) throw_input(message + "; the larger input comes first");
    const std::vector<Shape> shapes = factor_shapes(a);
    for (std::size_t i = 1; i < shapes.size(); ++i) {
      message += (i + 1 == shapes.size() ? " or " : ", ") + shapes[i].to_string();
    }
    throw_input(message);
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return rows_and_reference<RowsKernel, ReferenceKernel>();
  }
};

}  // namespace

const Operator& mul_operator() {
  static const Mul instance;
  return instance;
}

}  // namespace leadsman::ops
