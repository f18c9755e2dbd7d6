// Operators that cut, scale and rearrange: identities, and what they say when shapes do not meet.
#include <algorithm>

#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "ops/memory_order.h"
#include "tests/support/compare.h"
#include "tests/support/fast_against_reference.h"
#include "tests/support/op_runner.h"
#include "tests/support/random.h"
#include "tests/support/targets.h"

namespace leadsman::testing {
namespace {

using Pair = std::vector<std::int64_t>;

std::string refusal_of(const OpCase& c) {
  try {
    return "accepted: " + op_output_shape(c).to_string();
  } catch (const Error& error) {
    return error.kind() == ErrorKind::kInput ? error.what() : "of the wrong kind";
  }
}

OpCase with(const char* op, std::vector<Shape> inputs,
            const std::vector<std::pair<std::string, AttributeValue>>& attributes = {}) {
  OpCase c{.op = op};
  for (const Shape& shape : inputs) c.inputs.emplace_back(shape);
  for (const auto& [name, value] : attributes) c.attributes.set(name, value);
  return c;
}

TEST(ScaleRows, AgreesWithTheReferenceOnRandomShapes) {
  Random random(71);
  for (int i = 0; i < 30; ++i) {
    const std::int64_t channels = random.integer(1, 70);
    OpCase c{.op = "scale",
             .inputs = {random.tensor(
                 {random.integer(1, 2), channels, random.integer(1, 9), random.integer(1, 9)})}};
    c.attributes.set("factor", random.uniform(-2.0, 2.0));
    c.attributes.set("offset", random.uniform(-1.0, 1.0));
    if (random.coin()) c.weights["weight"] = random.tensor({channels, 1, 1});
    if (random.coin()) c.weights["bias"] = random.tensor({channels});
    check_fast_strategy(c, "rows");
  }
}

// Zhang et al. 2018: shuffled by g and then by the size of a group, channels are as they were.
TEST(ChannelShuffle, OfTheGroupsSizeUndoesIt) {
  Random random(72);
  OpCase c{.op = "channel_shuffle", .inputs = {random.tensor({2, 12, 3, 2})}};
  const Tensor x = c.inputs[0];
  c.attributes.set("groups", std::int64_t{3});
  c.inputs[0] = run_op(c, "reference");
  c.attributes.set("groups", std::int64_t{4});
  expect_same_bits(run_op(c, "reference"), x);
}

TEST(ChannelShuffle, AgreesWithTheReferenceOnEveryInstructionSet) {
  Random random(76);
  for (int i = 0; i < 40; ++i) {
    const std::int64_t groups = random.integer(1, 6);
    OpCase c{.op = "channel_shuffle",
             .inputs = {random.tensor({random.integer(1, 2), groups * random.integer(1, 70),
                                       random.integer(1, 9), random.integer(1, 9)})}};
    c.attributes.set("groups", groups);
    const Tensor expected = run_op(c, "reference");
    on_every_target([&] {
      for (const int threads : {1, 3}) {
        expect_same_bits(run_op(c, "rows", {.threads = threads}), expected);
      }
    });
  }
}

TEST(MemoryOrder, OfInputsIsThatOfTheCore) {
  Random random(77);
  for (int i = 0; i < 60; ++i) {
    const Tensor x = i % 5 == 0 ? random.tensor({2, 7, 5})
                                : random.tensor({random.integer(1, 3), random.integer(1, 6),
                                                 random.integer(1, 90), random.integer(1, 90)});
    Tensor expected(x.shape());
    copy_from_logical(x.data(), {expected.mutable_data(), x.shape()});
    on_every_target([&] {
      for (const int threads : {1, 3}) {
        Tensor y(x.shape());
        ops::to_memory_order(x.data(), {y.mutable_data(), x.shape()}, threads);
        expect_same_bits(y, expected);
      }
    });
  }
}

TEST(TokensToImage, UndoesImageToTokens) {
  Random random(73);
  const Tensor x = random.tensor({2, 5, 3, 4});
  const Tensor tokens = run_op({.op = "image_to_tokens", .inputs = {x}}, "reference");
  expect_same_bits(run_op({.op = "tokens_to_image", .inputs = {tokens, x}}, "reference"), x);
}

TEST(Transpose, TwiceChangesNothing) {
  Random random(74);
  const Tensor x = random.tensor({2, 45, 67});
  const Tensor turned = run_op({.op = "transpose", .inputs = {x}}, "reference");
  expect_same_bits(run_op({.op = "transpose", .inputs = {turned}}, "reference"), x);
}

TEST(Slice, PiecesPutTogetherAreTheWhole) {
  Random random(75);
  const Tensor x = random.tensor({2, 9, 3, 4});
  OpCase first{.op = "slice", .inputs = {x}};
  OpCase rest = first;
  first.attributes.set("count", std::int64_t{4});
  rest.attributes.set("start", std::int64_t{4});
  const OpCase joined{.op = "concat",
                      .inputs = {run_op(first, "reference"), run_op(rest, "reference")}};
  expect_same_bits(run_op(joined, "reference"), x);
}

TEST(Arrangements, SayWhatDoesNotMeet) {
  const std::int64_t two = 2;
  const std::int64_t three = 3;
  EXPECT_EQ(refusal_of(with("channel_shuffle", {{1, 8, 2, 2}}, {{"groups", three}})),
            "groups is 3, which does not divide 8 channels");
  EXPECT_EQ(refusal_of(with("slice", {{1, 4, 2, 2}}, {{"start", three}, {"count", two}})),
            "start is 3 and count 2, but input of shape [1, 4, 2, 2] has 4 channels");
  EXPECT_EQ(
      refusal_of(with("slice", {{1, 2, 5}}, {{"axis", std::string("tokens")}, {"start", two}})),
      "start is 2 and count 0, but input of shape [1, 2, 5] has 2 tokens");
  EXPECT_EQ(refusal_of(with("slice", {{1, 2, 5, 5}}, {{"axis", std::string("tokens")}})),
            "input has shape [1, 2, 5, 5], expected rank 3");
  EXPECT_EQ(refusal_of(with("tokens_to_image", {{1, 11, 4}, {1, 8, 3, 4}})),
            "input 1 has shape [1, 11, 4], expected [1, 12, 4]");
  EXPECT_EQ(refusal_of(with("transpose", {{1, 11}})), "input has shape [1, 11], expected rank 3");
  EXPECT_EQ(refusal_of(with("features_to_image", {{1, 2, 3}})),
            "input has shape [1, 2, 3], expected rank 2");
  OpCase scaled = with("scale", {{1, 4, 2, 2}});
  scaled.weights["weight"] = Tensor(Shape{2, 2});
  EXPECT_EQ(refusal_of(scaled), "weight has shape [2, 2], expected [4]");
}

TEST(SidesAndNorms, SayWhatDoesNotMeet) {
  EXPECT_EQ(refusal_of(with("group_norm", {{1, 8, 2, 2}}, {{"groups", std::int64_t{3}}})),
            "groups is 3, which does not divide 8 channels");
  EXPECT_EQ(refusal_of(with("pad", {{1, 2, 3, 3}},
                            {{"padding", Pair{0, 3, 0, 0}}, {"mode", std::string("reflect")}})),
            "padding of 3 is too much for input of shape [1, 2, 3, 3] in the mode reflect");
  EXPECT_EQ(refusal_of(with("adaptive_max_pool", {{1, 2, 0, 3}}, {{"output_size", Pair{1, 1}}})),
            "input has shape [1, 2, 0, 3], which has no positions");
  EXPECT_EQ(refusal_of(with("resize", {{1, 2, 3}}, {{"factor", Pair{2, 2}}})),
            "input has shape [1, 2, 3], expected rank 4");
  EXPECT_EQ(refusal_of(with("resize", {{1, 2, 3, 3}}, {{"factor", Pair{2, 0}}})),
            "factor: 0 is below 1");
  EXPECT_EQ(refusal_of(with("local_response_norm", {{1, 2, 3}}, {{"size", std::int64_t{5}}})),
            "input has shape [1, 2, 3], expected rank 4");
  EXPECT_EQ(refusal_of(with("l2_normalize", {{3}})),
            "input has shape [3], expected rank 2 or 3 or 4");
  OpCase grouped = with("group_norm", {{1, 8, 2, 2}}, {{"groups", std::int64_t{2}}});
  grouped.weights["bias"] = Tensor(Shape{2});
  EXPECT_EQ(refusal_of(grouped), "bias has shape [2], expected [8]");
  EXPECT_EQ(refusal_of(with("pad", {{1, 2, 3, 3}}, {{"padding", Pair{0, -1, 0, 0}}})),
            "padding: -1 is below 0");
}

// What torch.nn.functional.normalize documents: norms below eps are divided by eps.
TEST(L2Normalize, GivesEveryPositionTheNormOne) {
  Random random(76);
  const Tensor x = random.tensor({2, 9, 3, 4});
  const Tensor y = run_op({.op = "l2_normalize", .inputs = {x}}, "reference");
  for (std::int64_t position = 0; position < 24; ++position) {
    double squares = 0.0;
    for (std::int64_t c = 0; c < 9; ++c) {
      const float value = y.data()[position / 12 * 108 + c * 12 + position % 12];
      squares += static_cast<double>(value) * static_cast<double>(value);
    }
    EXPECT_NEAR(squares, 1.0, 1e-6);
  }
  const Tensor zero(Shape{1, 3});
  expect_same_bits(run_op({.op = "l2_normalize", .inputs = {zero}}, "reference"), zero);
}

// Constant images stay constant: the weights of every interpolation add up to 1.
TEST(Resize, KeepsConstantImages) {
  for (const char* interpolation : {"nearest", "bilinear", "bicubic"}) {
    Tensor x(Shape{1, 2, 3, 4});
    std::fill_n(x.mutable_data(), x.elements(), 0.7F);
    OpCase c =
        with("resize", {}, {{"factor", Pair{3, 4}}, {"interpolation", std::string(interpolation)}});
    c.inputs = {x};
    const Tensor y = run_op(c, "reference");
    EXPECT_EQ(y.shape(), (Shape{1, 2, 9, 16}));
    for (const float value : y.values()) EXPECT_FLOAT_EQ(value, 0.7F) << interpolation;
  }
}

TEST(WindowAttention, SaysWhatDoesNotMeet) {
  const auto windowed = [](Shape input, std::int64_t heads, Pair window, Pair shift = {0, 0},
                           const char* arrangement = "window") {
    return with("window_attention", {input},
                {{"heads", heads},
                 {"window", window},
                 {"shift", shift},
                 {"arrangement", std::string(arrangement)}});
  };
  EXPECT_EQ(refusal_of(windowed({1, 10, 4, 4}, 1, {2, 2})),
            "input has shape [1, 10, 4, 4], whose channels are not q, k and v of 1 heads");
  EXPECT_EQ(refusal_of(windowed({1, 12, 4, 4}, 3, {2, 2})),
            "input has shape [1, 12, 4, 4], whose channels are not q, k and v of 3 heads");
  EXPECT_EQ(refusal_of(windowed({1, 12, 4, 4}, 2, {2, 2}, {2, 0})),
            "shift is as large as the window");
  EXPECT_EQ(refusal_of(windowed({1, 12, 5, 4}, 2, {2, 2}, {0, 0}, "grid")),
            "a grid of 2 x 2 does not divide a map of 5 x 4, or is shifted");
  OpCase biased = windowed({1, 12, 4, 4}, 2, {2, 2});
  biased.weights["position_bias"] = Tensor(Shape{9, 1});
  EXPECT_EQ(refusal_of(biased), "position_bias has shape [9, 1], expected [9, 2]");
}

TEST(Attention, BiasFitsOneNumberOfTokens) {
  OpCase c = with("attention", {{1, 6, 12}}, {{"heads", std::int64_t{2}}});
  c.weights["position_bias"] = Tensor(Shape{2, 5, 5});
  EXPECT_EQ(refusal_of(c),
            "position_bias has shape [2, 5, 5], expected [2, 6, 6] or [1, 6, 6]: it fits one "
            "number of tokens");
}

}  // namespace
}  // namespace leadsman::testing
