#include "ops/window_attention/window_attention.h"

#include <array>
#include <cmath>

#include "leadsman/error.h"
#include "ops/attention/attention.h"

namespace leadsman::ops {
namespace {

std::int64_t round_up(std::int64_t size, std::int64_t window) {
  return (size + window - 1) / window * window;
}

// Which of the three runs of a shifted axis a place is in: before the last window, in it but not
// wrapped around, wrapped around.
int run_of(std::int64_t place, std::int64_t padded, std::int64_t window, std::int64_t shift) {
  if (shift == 0 || place < padded - window) return 0;
  return place < padded - shift ? 1 : 2;
}

std::vector<AttributeSpec> window_attributes() {
  std::vector<AttributeSpec> specs = attention_attributes();
  specs.push_back({.name = "window",
                   .type = AttributeType::kPair,
                   .fallback = {},
                   .meaning = "height and width of a window, in positions",
                   .minimum = 1,
                   .maximum = 1024,
                   .choices = {}});
  specs.push_back({.name = "shift",
                   .type = AttributeType::kPair,
                   .fallback = std::vector<std::int64_t>{0, 0},
                   .meaning = "how far windows are moved down and to the right",
                   .minimum = 0,
                   .maximum = 1024,
                   .choices = {}});
  specs.push_back({.name = "arrangement",
                   .type = AttributeType::kText,
                   .fallback = std::string("window"),
                   .meaning = "positions that attend to each other: neighbours, or a wide grid",
                   .choices = {"window", "grid"}});
  specs.push_back({.name = "cosine",
                   .type = AttributeType::kFlag,
                   .fallback = false,
                   .meaning = "scores are cosines of q and k; `scale` does not count",
                   .choices = {}});
  return specs;
}

class WindowAttention final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "window_attention",
        .meaning =
            "multi-head attention within windows or grids of an image (Liu et al. 2021; Tu "
            "et al. 2022)",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = window_attributes(),
        .weights = {{"position_bias", false, "[(2h-1)*(2w-1), heads], by the offset of the key"},
                    {"head_scale", false, "[heads], factor of the scores"},
                    {"padding", false, "[3C], q, k and v beyond the edge; 0 when absent", false}},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const WindowGeometry g(context);
    return {g.n, g.c, g.height, g.width};
  }

  Cost cost(const OpContext& context) const override {
    const WindowGeometry g(context);
    return {.macs = 2 * g.n * g.windows() * g.heads * g.tokens * g.tokens * g.d,
            .reduction = g.d + g.tokens};
  }

  std::span<const Strategy* const> strategies() const override {
    static const std::array<const Strategy*, 2> all{&window_attention_blocked(),
                                                    &window_attention_reference()};
    return all;
  }
};

}  // namespace

WindowGeometry::WindowGeometry(const OpContext& context) {
  const Shape& input = context.inputs[0];
  require_rank("input", input, {4});
  n = input[0];
  c = input[1] / 3;
  height = input[2];
  width = input[3];
  heads = context.attributes.integer("heads");
  if (input[1] % 3 != 0 || c < 1 || c % heads != 0) {
    throw_input("input has shape " + input.to_string() + ", whose channels are not q, k and v of " +
                std::to_string(heads) + " heads");
  }
  if (height < 1 || width < 1) {
    throw_input("input has shape " + input.to_string() + ", which has no positions");
  }
  d = c / heads;
  window_height = context.attributes.integers("window")[0];
  window_width = context.attributes.integers("window")[1];
  tokens = window_height * window_width;
  shift_down = context.attributes.integers("shift")[0];
  shift_right = context.attributes.integers("shift")[1];
  grid = context.attributes.text("arrangement") == "grid";
  cosine = context.attributes.flag("cosine");
  const double given = context.attributes.number("scale");
  scale = given == 0.0 ? 1.0 / std::sqrt(static_cast<double>(d)) : given;
  if (grid &&
      (height % window_height != 0 || width % window_width != 0 || shift_down + shift_right != 0)) {
    throw_input("a grid of " + std::to_string(window_height) + " x " +
                std::to_string(window_width) + " does not divide a map of " +
                std::to_string(height) + " x " + std::to_string(width) + ", or is shifted");
  }
  if (shift_down >= window_height || shift_right >= window_width) {
    throw_input("shift is as large as the window");
  }
  rows = (height + window_height - 1) / window_height;
  columns = (width + window_width - 1) / window_width;
  if (rows == 1) shift_down = 0;
  if (columns == 1) shift_right = 0;
  const auto require = [&](const char* role, const Shape& expected) {
    if (const Tensor* tensor = context.weight(role)) {
      require_shape(role, tensor->shape(), expected);
    }
  };
  require("position_bias", {(2 * window_height - 1) * (2 * window_width - 1), heads});
  require("head_scale", {heads});
  require("padding", {3 * c});
}

std::int64_t WindowGeometry::position(std::int64_t window, std::int64_t i) const {
  const std::int64_t down = i / window_width;
  const std::int64_t right = i % window_width;
  if (grid) return (down * rows + window / columns) * width + right * columns + window % columns;
  const std::int64_t y =
      (window / columns * window_height + down + shift_down) % round_up(height, window_height);
  const std::int64_t x =
      (window % columns * window_width + right + shift_right) % round_up(width, window_width);
  return y < height && x < width ? y * width + x : -1;
}

int WindowGeometry::region(std::int64_t window, std::int64_t i) const {
  const std::int64_t y = window / columns * window_height + i / window_width;
  const std::int64_t x = window % columns * window_width + i % window_width;
  return 3 * run_of(y, rows * window_height, window_height, shift_down) +
         run_of(x, columns * window_width, window_width, shift_right);
}

bool WindowGeometry::is_divided(std::int64_t window) const {
  return (shift_down > 0 && window / columns == rows - 1) ||
         (shift_right > 0 && window % columns == columns - 1);
}

std::int64_t WindowGeometry::bias_row(std::int64_t query, std::int64_t key) const {
  const std::int64_t down = query / window_width - key / window_width + window_height - 1;
  const std::int64_t right = query % window_width - key % window_width + window_width - 1;
  return down * (2 * window_width - 1) + right;
}

double WindowGeometry::head_factor(const OpContext& context, std::int64_t head) const {
  const Tensor* head_scale = context.weight("head_scale");
  return (cosine ? 1.0 : scale) *
         (head_scale ? static_cast<double>(head_scale->data()[head]) : 1.0);
}

std::vector<float> padding_row(const OpContext& context) {
  const Tensor* padding = context.weight("padding");
  if (padding == nullptr) {
    return std::vector<float>(static_cast<std::size_t>(channel_count(context.inputs[0])));
  }
  return {padding->data(), padding->data() + padding->elements()};
}

const Operator& window_attention_operator() {
  static const WindowAttention instance;
  return instance;
}

}  // namespace leadsman::ops
