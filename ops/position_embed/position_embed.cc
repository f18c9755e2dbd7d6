#include "ops/position_embed/position_embed.h"

#include <cmath>

#include "leadsman/error.h"
#include "ops/rows.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

/// What the weight holds, and what the tokens want.
struct Grids {
  std::int64_t prefix = 0;
  std::int64_t stored_h = 0, stored_w = 0;
  std::int64_t h = 0, w = 0;

  bool differ() const { return stored_h != h || stored_w != w; }
};

/// Largest r with r * r <= x, for 0 <= x <= Shape::kMaxElements.
std::int64_t integer_root(std::int64_t x) {
  return static_cast<std::int64_t>(std::sqrt(static_cast<double>(x)));
}

// The stored grid is square, unless it has as many positions as the wanted one and no root.
Grids read_grids(const OpContext& context) {
  const std::int64_t stored = context.weight("weight")->shape()[1];
  Grids g{.prefix = context.attributes.integer("prefix_tokens")};
  if (g.prefix > stored) {
    throw_input("weight has " + std::to_string(stored) + " positions, fewer than prefix_tokens " +
                std::to_string(g.prefix));
  }
  const std::int64_t root = integer_root(stored - g.prefix);
  const bool square = root * root == stored - g.prefix;
  if (context.inputs.size() < 2) {
    g.stored_h = g.h = 1;
    g.stored_w = g.w = stored - g.prefix;
    return g;
  }
  g.h = context.inputs[1][2];
  g.w = context.inputs[1][3];
  g.stored_h = square ? root : g.h;
  g.stored_w = square ? root : g.w;
  if (Shape{g.stored_h, g.stored_w}.elements() != stored - g.prefix || stored == g.prefix) {
    throw_input("weight has " + std::to_string(stored) + " positions: the " +
                std::to_string(stored - g.prefix) + " behind prefix_tokens form no square grid, " +
                "so they cannot be fitted to " + std::to_string(g.h) + " x " + std::to_string(g.w));
  }
  return g;
}

class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context)
      : items_(context.output[0]),
        tokens_(context.output[1]),
        channels_(context.output[2]),
        table_(*context.weight("weight")) {
    const Grids g = read_grids(context);
    if (!g.differ()) return;
    std::vector<float> table(table_.data(), table_.data() + g.prefix * channels_);
    const std::vector<float> grid = interpolate_grid(table_.data() + g.prefix * channels_,
                                                     g.stored_h, g.stored_w, channels_, g.h, g.w);
    table.insert(table.end(), grid.begin(), grid.end());
    packed_bytes_ = table.size() * sizeof(float);
    table_ = Tensor(Shape{tokens_, channels_}, std::move(table));
  }

  std::size_t packed_bytes() const override { return packed_bytes_; }
  bool runs_in_place() const override { return true; }

  void run(const KernelCall& call) const override {
    const float* table = table_.data();
    parallel_rows(call.threads, items_ * tokens_, channels_,
                  [&](std::int64_t begin, std::int64_t end) {
                    for (std::int64_t row = begin; row < end; ++row) {
                      const float* x = call.inputs[0].data + row * channels_;
                      const float* e = table + row % tokens_ * channels_;
                      float* y = call.output.data + row * channels_;
                      for (std::int64_t c = 0; c < channels_; ++c) y[c] = x[c] + e[c];
                    }
                  });
  }

 private:
  std::int64_t items_;
  std::int64_t tokens_;
  std::int64_t channels_;
  Tensor table_;
  std::size_t packed_bytes_ = 0;
};

class PositionEmbed final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "position_embed",
        .meaning =
            "learned positions added to the tokens, interpolated to the patch grid "
            "(Dosovitskiy et al. 2021)",
        .min_inputs = 1,
        .max_inputs = 2,
        .attributes = {{.name = "prefix_tokens",
                        .type = AttributeType::kInteger,
                        .fallback = std::int64_t{1},
                        .meaning = "tokens in front that lie outside the grid",
                        .minimum = 0,
                        .maximum = 1 << 24,
                        .choices = {}}},
        .weights = {{"weight", true, "[1, prefix_tokens + grid height * grid width, C]"}},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    require_rank("input 1", input, {3});
    const Shape& weight = context.weight("weight")->shape();
    require_rank("weight", weight, {3});
    require_shape("weight", weight, {1, weight[1], input[2]});
    const bool has_grid = context.inputs.size() > 1;
    if (has_grid) require_rank("input 2", context.inputs[1], {4});
    const Grids g = read_grids(context);
    const std::int64_t expected = g.prefix + Shape{g.h, g.w}.elements();
    if (input[1] != expected) {
      throw_input("input 1 has " + std::to_string(input[1]) + " tokens, expected " +
                  std::to_string(expected) +
                  (has_grid ? ": prefix_tokens and the grid of " + std::to_string(g.h) + " x " +
                                  std::to_string(g.w)
                            : ", as stored; to interpolate, give the patch grid as input 2"));
    }
    return input;
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& position_embed_operator() {
  static const PositionEmbed instance;
  return instance;
}

}  // namespace leadsman::ops
