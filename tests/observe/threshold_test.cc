// How much room the derived thresholds leave: neither so tight that rounding trips them, nor so
// wide that they find nothing. Widely spread layers, our fast kernels against the oracle.
#include "observe/threshold.h"

#include <algorithm>
#include <cmath>

#include <gtest/gtest.h>

#include "leadsman/compare.h"
#include "leadsman/plan.h"
#include "observe/single_layer.h"
#include "ops/operator.h"
#include "tests/support/graph_builder.h"

namespace leadsman {
namespace {

using testing::GraphBuilder;
using testing::Random;

struct Layered {
  GraphBuilder builder;
  Tensor input;
};

double ratio_of(const Layered& c) {
  Graph graph = c.builder.graph();
  graph.outputs = {graph.layers[0].name};
  check_graph(graph);
  const Layer& layer = graph.layers[0];
  const std::span<const Tensor> inputs(&c.input, 1);
  PlanOptions options;
  options.threads = 2;
  const Tensor fast = run_layer(layer, c.builder.weights(), inputs, options);
  options.reference_kernels = true;
  const Tensor oracle = run_layer(layer, c.builder.weights(), inputs, options);
  options.reference_kernels = false;
  options.input_shapes = {c.input.shape()};
  const auto plan = Plan::make(graph, c.builder.weights(), options);
  const RoundingModel model =
      rounding_model(layer, c.builder.weights(), plan->layers()[0], inputs, oracle, 2);
  EXPECT_GE(model.gain, 1.0);
  return measure_difference(fast, oracle).relative_l2 / model.own;
}

struct Range {
  double lowest = 1e9;
  double highest = 0.0;
  void add(double ratio) {
    lowest = std::min(lowest, ratio);
    highest = std::max(highest, ratio);
  }
};

TEST(Threshold, ConvolutionsStayWellBelowIt) {
  Random random(1);
  Range range;
  for (int i = 0; i < 40; ++i) {
    const std::int64_t in = random.integer(1, 96);
    const std::int64_t kernel = 2 * random.integer(0, 2) + 1;
    Layered c{GraphBuilder(random.bits()), {}};
    c.builder.image(in, 9, 11);
    c.builder.conv("conv", "image", in, random.integer(1, 40), kernel, random.integer(1, 2));
    // From zero mean to nearly constant inputs, whose products cancel against each other.
    const double shift = random.uniform(0.0, 20.0);
    c.input = random.tensor({1, in, 9, 11}, shift - 1.0, shift + 1.0);
    range.add(ratio_of(c));
  }
  EXPECT_LT(range.highest, 0.7);
  EXPECT_GT(range.highest, 0.01);
}

TEST(Threshold, LinearLayersStayWellBelowIt) {
  Random random(2);
  Range range;
  for (int i = 0; i < 40; ++i) {
    const std::int64_t in = random.integer(1, 2000);
    Layered c{GraphBuilder(random.bits()), {}};
    c.builder.graph().inputs.push_back({"image", {GraphInput::kFree, in}, {}});
    c.builder.linear("linear", "image", in, random.integer(1, 50));
    const double shift = random.uniform(0.0, 20.0);
    c.input = random.tensor({random.integer(1, 9), in}, shift - 1.0, shift + 1.0);
    range.add(ratio_of(c));
  }
  EXPECT_LT(range.highest, 0.7);
  EXPECT_GT(range.highest, 0.01);
}

TEST(Threshold, NormsOfShiftedInputsStayBelowIt) {
  Random random(3);
  Range range;
  for (int i = 0; i < 40; ++i) {
    const std::int64_t channels = random.integer(2, 500);
    Layered c{GraphBuilder(random.bits()), {}};
    c.builder.graph().inputs.push_back(
        {"image", {GraphInput::kFree, GraphInput::kFree, channels}, {}});
    c.builder.layer_norm("norm", "image", channels);
    const double shift = random.uniform(0.0, 50.0);
    c.input = random.tensor({1, 7, channels}, shift - 1.0, shift + 1.0);
    range.add(ratio_of(c));
  }
  EXPECT_LT(range.highest, 0.9);
}

TEST(Threshold, GroupNormsOfShiftedImagesStayBelowIt) {
  Random random(6);
  Range range;
  for (int i = 0; i < 40; ++i) {
    const std::int64_t groups = random.integer(1, 8);
    const std::int64_t channels = groups * random.integer(1, 30);
    Layered c{GraphBuilder(random.bits()), {}};
    c.builder.image(channels, 7, 9);
    c.builder.layer("norm", "group_norm", {"image"}, {{"groups", groups}});
    const double shift = random.uniform(0.0, 50.0);
    c.input = random.tensor({2, channels, 7, 9}, shift - 1.0, shift + 1.0);
    range.add(ratio_of(c));
  }
  EXPECT_LT(range.highest, 0.7);
  EXPECT_GT(range.highest, 1e-4);
}

TEST(Threshold, AttentionStaysBelowItForSmallAndLargeScores) {
  Random random(4);
  Range range;
  for (int i = 0; i < 30; ++i) {
    const std::int64_t heads = random.integer(1, 4);
    const std::int64_t depth = random.integer(1, 48);
    Layered c{GraphBuilder(random.bits()), {}};
    c.builder.graph().inputs.push_back(
        {"image", {GraphInput::kFree, GraphInput::kFree, 3 * heads * depth}, {}});
    c.builder.layer("attention", "attention", {"image"}, {{"heads", heads}});
    const double size = random.uniform(0.1, 6.0);
    c.input = random.tensor({2, random.integer(1, 70), 3 * heads * depth}, -size, size);
    range.add(ratio_of(c));
  }
  EXPECT_LT(range.highest, 0.9);
}

// The derivation itself: the error of a float sum of K products relative to the root of the sum
// of their squares grows no faster than sqrt(K) u (Higham & Mary 2019, theorem 2.4 in the mean),
// and by about that: a constant in between would not do.
TEST(Threshold, ErrorsOfSumsGrowLikeTheSquareRoot) {
  Random random(5);
  const auto error_at = [&](int length) {
    double squares = 0.0;
    constexpr int kTrials = 400;
    for (int trial = 0; trial < kTrials; ++trial) {
      float sum = 0.0F;
      double exact = 0.0;
      double terms = 0.0;
      for (int k = 0; k < length; ++k) {
        const auto a = static_cast<float>(random.uniform(-1.0, 1.0));
        const auto b = static_cast<float>(random.uniform(-1.0, 1.0));
        const double product = static_cast<double>(a) * static_cast<double>(b);
        sum = static_cast<float>(static_cast<double>(sum) + product);  // as one FMA rounds
        exact += product;
        terms += product * product;
      }
      const double error = (static_cast<double>(sum) - exact) / std::sqrt(terms);
      squares += error * error;
    }
    return std::sqrt(squares / kTrials) / 0x1p-24;
  };
  const double at_64 = error_at(64);
  const double at_4096 = error_at(4096);
  EXPECT_LT(at_64, std::sqrt(64.0));
  EXPECT_LT(at_4096, std::sqrt(4096.0));
  EXPECT_NEAR(std::log(at_4096 / at_64) / std::log(64.0), 0.5, 0.15);
}

}  // namespace
}  // namespace leadsman
