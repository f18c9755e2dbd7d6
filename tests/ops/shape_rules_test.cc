// What the operators say when shapes, weights and attributes do not meet.
#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "tests/support/op_runner.h"

namespace leadsman::testing {
namespace {

using Pair = std::vector<std::int64_t>;
using Named = std::map<std::string, Tensor, std::less<>>;

struct Wrong {
  const char* op;
  std::vector<Shape> inputs;
  std::vector<std::pair<std::string, AttributeValue>> attributes;
  std::vector<std::pair<std::string, Shape>> weights;
  const char* message;
};

std::string message_of(const Wrong& wrong) {
  OpCase c{.op = wrong.op};
  for (const Shape& shape : wrong.inputs) {
    // Nothing reads the values: one zero under any shape would do, had it no size to check.
    c.inputs.push_back(Tensor::borrow(shape, nullptr, nullptr));
  }
  for (const auto& [name, value] : wrong.attributes) c.attributes.set(name, value);
  for (const auto& [role, shape] : wrong.weights) c.weights[role] = Tensor(shape);
  try {
    return "accepted: " + op_output_shape(c).to_string();
  } catch (const Error& error) {
    return error.kind() == ErrorKind::kInput ? error.what() : "of the wrong kind";
  }
}

class ShapeRules : public ::testing::TestWithParam<Wrong> {};

TEST_P(ShapeRules, SayWhatDoesNotMeet) {
  EXPECT_EQ(message_of(GetParam()), GetParam().message);
}

const std::int64_t kTwo = 2;
const std::int64_t kThree = 3;

INSTANTIATE_TEST_SUITE_P(
    Convolution, ShapeRules,
    ::testing::Values(
        Wrong{"conv2d",
              {{1, 3, 4}},
              {{"kernel_size", kThree}},
              {{"weight", {4, 3, 3, 3}}},
              "input has shape [1, 3, 4], expected rank 4"},
        Wrong{"conv2d",
              {{1, 3, 8, 8}},
              {{"kernel_size", kThree}},
              {{"weight", {4, 3, 3}}},
              "weight has shape [4, 3, 3], expected rank 4"},
        Wrong{"conv2d",
              {{1, 3, 8, 8}},
              {{"kernel_size", kThree}},
              {{"weight", {4, 3, 5, 3}}},
              "weight has shape [4, 3, 5, 3], expected [4, 3, 3, 3]"},
        Wrong{"conv2d",
              {{1, 4, 8, 8}},
              {{"kernel_size", kThree}, {"groups", kTwo}},
              {{"weight", {4, 4, 3, 3}}},
              "weight has shape [4, 4, 3, 3], expected [4, 2, 3, 3]"},
        Wrong{"conv2d",
              {{1, 4, 8, 8}},
              {{"kernel_size", kThree}, {"groups", kThree}},
              {{"weight", {4, 4, 3, 3}}},
              "groups is 3, which does not divide 4 input channels and 4 output channels"},
        Wrong{"conv2d",
              {{1, 3, 8, 8}},
              {{"kernel_size", kThree}},
              {{"weight", {4, 3, 3, 3}}, {"bias", {3}}},
              "bias has shape [3], expected [4]"},
        Wrong{"conv2d",
              {{1, 3, 8, 2}},
              {{"kernel_size", kThree}},
              {{"weight", {4, 3, 3, 3}}},
              "a window of width 3 does not fit in an input of 2 plus padding 0 and 0"},
        Wrong{"conv2d",
              {{1, 3, 8, 8}},
              {{"kernel_size", kThree}, {"stride", std::int64_t{0}}},
              {{"weight", {4, 3, 3, 3}}},
              "stride: 0 is below 1"},
        Wrong{"conv2d",
              {{1, 3, 8, 8}},
              {{"kernel_size", Pair{3}}},
              {{"weight", {4, 3, 3, 3}}},
              "kernel_size: is not an integer or [height, width]"},
        Wrong{"conv2d",
              {{1, 3, 8, 8}},
              {{"kernel_size", kThree}, {"padding", Pair{1}}},
              {{"weight", {4, 3, 3, 3}}},
              "padding: is not an integer, [height, width] or [top, left, bottom, right]"},
        Wrong{"linear",
              {{3}},
              {},
              {{"weight", {5, 3}}},
              "input has shape [3], expected rank 2 or 3 or 4"},
        Wrong{"linear",
              {{2, 4, 3}},
              {},
              {{"weight", {5, 4}}},
              "weight has shape [5, 4], expected [5, 3]"},
        Wrong{"linear",
              {{2, 3}},
              {},
              {{"weight", {5, 3}}, {"bias", {3}}},
              "bias has shape [3], expected [5]"}));

INSTANTIATE_TEST_SUITE_P(
    Elementwise, ShapeRules,
    ::testing::Values(
        Wrong{"batch_norm",
              {{5}},
              {},
              {{"mean", {3}}, {"variance", {3}}},
              "input has shape [5], expected rank 2 or 3 or 4"},
        Wrong{"batch_norm",
              {{1, 3, 5, 5}},
              {},
              {{"mean", {3}}, {"variance", {5}}},
              "variance has shape [5], expected [3]"},
        Wrong{"batch_norm",
              {{1, 3, 5, 5}},
              {},
              {{"mean", {3}}, {"variance", {3}}, {"weight", {1}}},
              "weight has shape [1], expected [3]"},
        Wrong{"batch_norm",
              {{1, 3}},
              {{"eps", -1e-5}},
              {{"mean", {3}}, {"variance", {3}}},
              "eps: -0.000010 is below 0"},
        Wrong{"add",
              {{1, 3, 4, 5}, {1, 3, 5, 4}},
              {},
              {},
              "input 2 has shape [1, 3, 5, 4], expected [1, 3, 4, 5]"},
        Wrong{
            "mul",
            {{2, 3, 4, 5}, {1, 3, 1, 1}},
            {},
            {},
            "input 2 has shape [1, 3, 1, 1], expected [2, 3, 4, 5], [2, 3, 1, 1] or [2, 1, 4, 5]"},
        Wrong{"mul",
              {{1, 3, 1, 1}, {1, 3, 4, 5}},
              {},
              {},
              "input 2 has shape [1, 3, 4, 5], expected [1, 3, 1, 1]; the larger input comes "
              "first"},
        Wrong{"mul",
              {{1, 3, 4}, {1, 4, 3}},
              {},
              {},
              "input 2 has shape [1, 4, 3], expected [1, 3, 4], [1, 1, 4] or [1, 3, 1]"},
        Wrong{"mul",
              {{2, 1, 4}, {2, 3, 4}},
              {},
              {},
              "input 2 has shape [2, 3, 4], expected [2, 1, 4]; the larger input comes first"},
        Wrong{"mul", {{3}, {4}}, {}, {}, "input 2 has shape [4], expected [3]"},
        Wrong{
            "mul", {{1, 3}, {1, 4}}, {}, {}, "input 2 has shape [1, 4], expected [1, 3] or [1, 1]"},
        Wrong{"concat",
              {{1, 3, 4, 5}, {1, 2, 4, 6}},
              {},
              {},
              "input 2 has shape [1, 2, 4, 6], expected [1, 2, 4, 5]"},
        Wrong{"concat",
              {{1, 3}, {1, 2}, {2, 3}},
              {},
              {},
              "input 3 has shape [2, 3], expected [1, 3]"},
        Wrong{"concat", {{1, 3, 4}, {1, 3}}, {}, {}, "input 2 has shape [1, 3], expected rank 3"},
        Wrong{"concat", {{3}, {3}}, {}, {}, "input 1 has shape [3], expected rank 2 or 3 or 4"},
        Wrong{"softmax",
              {{1, 3, 4, 5, 6}},
              {},
              {},
              "input has shape [1, 3, 4, 5, 6], expected rank 2 or 3 or 4"}));

INSTANTIATE_TEST_SUITE_P(
    Pooling, ShapeRules,
    ::testing::Values(
        Wrong{"max_pool",
              {{1, 3, 4}},
              {{"kernel_size", kTwo}},
              {},
              "input has shape [1, 3, 4], expected rank 4"},
        Wrong{"max_pool",
              {{1, 3, 4, 4}},
              {{"kernel_size", kThree}, {"dilation", kTwo}},
              {},
              "a window of height 5 does not fit in an input of 4 plus padding 0 and 0"},
        Wrong{"max_pool",
              {{1, 3, 4, 4}},
              {{"kernel_size", Pair{3, 2}}, {"padding", kTwo}},
              {},
              "padding of 2 is not below the kernel's width 2"},
        Wrong{"avg_pool",
              {{1, 3, 4, 4}},
              {{"kernel_size", kThree}, {"padding", Pair{0, 0, 3, 0}}},
              {},
              "padding of 3 is not below the kernel's height 3"},
        Wrong{"avg_pool",
              {{3, 4}},
              {{"kernel_size", kTwo}},
              {},
              "input has shape [3, 4], expected rank 4"},
        Wrong{"avg_pool",
              {{1, 3, 0, 4}},
              {{"kernel_size", kTwo}},
              {},
              "a window of height 2 does not fit in an input of 0 plus padding 0 and 0"},
        Wrong{"adaptive_avg_pool",
              {{1, 3, 4}},
              {{"output_size", kTwo}},
              {},
              "input has shape [1, 3, 4], expected rank 4"},
        Wrong{"adaptive_avg_pool",
              {{1, 3, 4, 0}},
              {{"output_size", kTwo}},
              {},
              "input has shape [1, 3, 4, 0], which has no positions"},
        Wrong{"adaptive_avg_pool",
              {{1, 3, 4, 4}},
              {{"output_size", Pair{2, 0}}},
              {},
              "output_size: 0 is below 1"},
        Wrong{"channel_pool",
              {{1, 3}},
              {{"kind", std::string("max")}},
              {},
              "input has shape [1, 3], expected rank 3 or 4"},
        Wrong{"mean", {{1, 3}}, {}, {}, "input has shape [1, 3], expected rank 3 or 4"},
        Wrong{"mean", {{1, 0, 3}}, {}, {}, "input has shape [1, 0, 3], which has no positions"}));

INSTANTIATE_TEST_SUITE_P(
    Tokens, ShapeRules,
    ::testing::Values(
        Wrong{"flatten", {{3}}, {}, {}, "input has shape [3], expected rank 2 or 3 or 4"},
        Wrong{"image_to_tokens", {{1, 4, 3}}, {}, {}, "input has shape [1, 4, 3], expected rank 4"},
        Wrong{"class_token",
              {{1, 4}},
              {},
              {{"weight", {1, 1, 4}}},
              "input has shape [1, 4], expected rank 3"},
        Wrong{"class_token",
              {{1, 5, 4}},
              {},
              {{"weight", {1, 4}}},
              "weight has shape [1, 4], expected rank 3"},
        Wrong{"class_token",
              {{2, 5, 4}},
              {},
              {{"weight", {2, 1, 4}}},
              "weight has shape [2, 1, 4], expected [1, 1, 4]"},
        Wrong{"select", {{1, 4}}, {{"index", kTwo}}, {}, "input has shape [1, 4], expected rank 3"},
        Wrong{"select",
              {{1, 3, 4}},
              {{"index", kThree}},
              {},
              "index is 3, but input of shape [1, 3, 4] has 3 tokens"},
        Wrong{"select", {{1, 3, 4}}, {{"index", std::int64_t{-1}}}, {}, "index: -1 is below 0"},
        Wrong{"position_embed",
              {{1, 4}},
              {},
              {{"weight", {1, 5, 4}}},
              "input 1 has shape [1, 4], expected rank 3"},
        Wrong{"position_embed",
              {{1, 5, 4}},
              {},
              {{"weight", {5, 4}}},
              "weight has shape [5, 4], expected rank 3"},
        Wrong{"position_embed",
              {{1, 5, 4}},
              {},
              {{"weight", {1, 5, 3}}},
              "weight has shape [1, 5, 3], expected [1, 5, 4]"},
        Wrong{"position_embed",
              {{1, 5, 4}, {1, 4, 2}},
              {},
              {{"weight", {1, 5, 4}}},
              "input 2 has shape [1, 4, 2], expected rank 4"},
        Wrong{"position_embed",
              {{1, 10, 4}},
              {},
              {{"weight", {1, 5, 4}}},
              "input 1 has 10 tokens, expected 5, as stored; to interpolate, give the patch grid "
              "as input 2"},
        Wrong{"position_embed",
              {{1, 5, 4}, {1, 4, 3, 3}},
              {},
              {{"weight", {1, 5, 4}}},
              "input 1 has 5 tokens, expected 10: prefix_tokens and the grid of 3 x 3"},
        Wrong{"position_embed",
              {{1, 10, 4}, {1, 4, 3, 3}},
              {},
              {{"weight", {1, 7, 4}}},
              "weight has 7 positions: the 6 behind prefix_tokens form no square grid, so they "
              "cannot be fitted to 3 x 3"},
        Wrong{"position_embed",
              {{1, 5, 4}},
              {{"prefix_tokens", std::int64_t{6}}},
              {{"weight", {1, 5, 4}}},
              "weight has 5 positions, fewer than prefix_tokens 6"}));

}  // namespace
}  // namespace leadsman::testing
