#include "ops/slice/slice.h"

#include <cstring>

#include "leadsman/error.h"
#include "ops/rows.h"
#include "ops/strategy_of.h"

namespace leadsman::ops {
namespace {

bool along_tokens(const OpContext& context) {
  return context.attributes.text("axis") == "tokens";
}

// Rows of `in` floats, of which `out` from `start` on are kept: a position's channels, or all
// tokens of an item.
class ReferenceKernel final : public Kernel {
 public:
  explicit ReferenceKernel(const OpContext& context) : start_(context.attributes.integer("start")) {
    const Shape& input = context.inputs[0];
    const bool tokens = along_tokens(context);
    const std::int64_t unit = tokens ? input[2] : 1;
    rows_ = tokens ? input[0] : position_count(input);
    in_ = unit * (tokens ? input[1] : channel_count(input));
    out_ = unit * (tokens ? context.output[1] : channel_count(context.output));
    start_ *= unit;
  }

  void run(const KernelCall& call) const override {
    parallel_rows(call.threads, rows_, out_, [&](std::int64_t begin, std::int64_t end) {
      for (std::int64_t row = begin; row < end; ++row) {
        std::memcpy(call.output.data + row * out_, call.inputs[0].data + row * in_ + start_,
                    static_cast<std::size_t>(out_) * sizeof(float));
      }
    });
  }

 private:
  std::int64_t rows_, in_, out_, start_;
};

AttributeSpec count_spec(std::string_view name, std::string_view meaning) {
  return {.name = name,
          .type = AttributeType::kInteger,
          .fallback = std::int64_t{0},
          .meaning = meaning,
          .minimum = 0,
          .maximum = 1 << 24,
          .choices = {}};
}

class Slice final : public Operator {
 public:
  const Contract& contract() const override {
    static const Contract contract{
        .name = "slice",
        .meaning = "some of the channels, or some of the tokens",
        .min_inputs = 1,
        .max_inputs = 1,
        .attributes = {{.name = "axis",
                        .type = AttributeType::kText,
                        .fallback = std::string("channels"),
                        .meaning = "which axis is cut",
                        .choices = {"channels", "tokens"}},
                       count_spec("start", "the first one that is kept, counted from 0"),
                       count_spec("count", "how many are kept; 0: all that follow")},
        .weights = {},
    };
    return contract;
  }

  Shape output_shape(const OpContext& context) const override {
    const Shape& input = context.inputs[0];
    const bool tokens = along_tokens(context);
    if (tokens) {
      require_rank("input", input, {3});
    } else {
      require_rank("input", input, {2, 3, 4});
    }
    const int axis = tokens ? 1 : channel_axis(input);
    const std::int64_t start = context.attributes.integer("start");
    const std::int64_t given = context.attributes.integer("count");
    const std::int64_t count = given == 0 ? input[axis] - start : given;
    if (count < 1 || start + count > input[axis]) {
      throw_input("start is " + std::to_string(start) + " and count " + std::to_string(given) +
                  ", but input of shape " + input.to_string() + " has " +
                  std::to_string(input[axis]) + (tokens ? " tokens" : " channels"));
    }
    return input.with(axis, count);
  }

  Cost cost(const OpContext& /*context*/) const override { return {}; }

  std::span<const Strategy* const> strategies() const override {
    return only_reference<ReferenceKernel>();
  }
};

}  // namespace

const Operator& slice_operator() {
  static const Slice instance;
  return instance;
}

}  // namespace leadsman::ops
