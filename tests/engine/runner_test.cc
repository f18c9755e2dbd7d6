#include "leadsman/runner.h"

#include <cmath>
#include <cstring>
#include <thread>

#include <gtest/gtest.h>

#include "leadsman/compare.h"
#include "leadsman/error.h"
#include "tests/support/compare.h"
#include "tests/support/graph_builder.h"

namespace leadsman {
namespace {

using testing::GraphBuilder;
using testing::Random;

struct Net {
  const char* name;
  GraphBuilder builder;
  Shape input;
};

std::vector<Net> nets() {
  return {{"conv", testing::small_conv_net(), {1, 3, 24, 20}},
          {"conv, batch 3, odd size", testing::small_conv_net(2), {3, 3, 29, 17}},
          {"transformer", testing::small_transformer(), {1, 3, 16, 16}},
          {"transformer, batch 2, larger", testing::small_transformer(2), {2, 3, 20, 28}},
          {"scaled products, batch 2", testing::small_scaled_net(), {2, 3, 7, 6}}};
}

PlanOptions options_for(const Net& net, int threads = 2) {
  PlanOptions options;
  options.input_shapes = {net.input};
  options.threads = threads;
  return options;
}

Tensor run(const Net& net, const PlanOptions& options, const Tensor& input) {
  Runner runner(Plan::make(net.builder.graph(), net.builder.weights(), options));
  runner.run(input);
  return to_tensor(runner.output());
}

double relative_error(const Tensor& a, const Tensor& b) {
  return measure_difference(a, b).relative_l2;
}

TEST(Runner, FusedPlansAgreeWithTheOracle) {
  for (const Net& net : nets()) {
    SCOPED_TRACE(net.name);
    const Tensor input = Random(5).tensor(net.input);
    PlanOptions oracle = options_for(net);
    oracle.reference_kernels = true;
    EXPECT_LT(relative_error(run(net, options_for(net), input), run(net, oracle, input)), 2e-6);
  }
}

TEST(Runner, FusedActivationsKeepTheirParameters) {
  for (const auto& [kind, parameter] : {std::pair("elu", "alpha"), {"leaky_relu", "slope"}}) {
    SCOPED_TRACE(kind);
    GraphBuilder b;
    b.image(3, 6, 6);
    b.conv("conv", "image", 3, 4, 3);
    b.layer("bent", "activation", {"conv"}, {{"kind", std::string(kind)}, {parameter, 0.3}});
    b.output("bent");
    const Net net{kind, b, {1, 3, 6, 6}};
    const Tensor input = Random(14).tensor(net.input);
    PlanOptions cut = options_for(net);
    cut.observe = {"conv"};
    EXPECT_LT(relative_error(run(net, options_for(net), input), run(net, cut, input)), 1e-7);
  }
}

TEST(Runner, ResultsAreTheSameBitsForAnyNumberOfThreads) {
  for (const Net& net : nets()) {
    SCOPED_TRACE(net.name);
    const Tensor input = Random(6).tensor(net.input);
    const Tensor one = run(net, options_for(net, 1), input);
    for (const int threads : {2, 3, 5}) {
      testing::expect_same_bits(run(net, options_for(net, threads), input), one);
    }
  }
}

TEST(Runner, ASecondRunGivesTheSameBits) {
  for (const Net& net : nets()) {
    SCOPED_TRACE(net.name);
    Runner runner(Plan::make(net.builder.graph(), net.builder.weights(), options_for(net)));
    const Tensor input = Random(7).tensor(net.input);
    runner.run(input);
    const Tensor first = to_tensor(runner.output());
    runner.run(Random(8).tensor(net.input));
    EXPECT_GT(relative_error(to_tensor(runner.output()), first), 1e-3);
    runner.run(input);
    testing::expect_same_bits(to_tensor(runner.output()), first);
  }
}

TEST(Runner, EachBatchEntryIsWhatItIsAlone) {
  const Net net{"conv", testing::small_conv_net(3), {3, 3, 24, 20}};
  const Tensor input = Random(9).tensor(net.input);
  const Tensor together = run(net, options_for(net), input);
  for (std::int64_t n = 0; n < 3; ++n) {
    const std::int64_t length = input.elements() / 3;
    const Tensor one({1, 3, 24, 20}, {input.data() + n * length, input.data() + (n + 1) * length});
    PlanOptions options;
    const Tensor alone = run(net, options, one);
    const Tensor part({1, 10}, {together.data() + n * 10, together.data() + (n + 1) * 10});
    EXPECT_LT(relative_error(alone, part), 1e-6);
  }
}

TEST(Runner, ThreadsShareAPlan) {
  for (const Net& net : nets()) {
    SCOPED_TRACE(net.name);
    const auto plan = Plan::make(net.builder.graph(), net.builder.weights(), options_for(net, 2));
    std::vector<Tensor> alone;
    for (std::uint64_t i = 0; i < 4; ++i) {
      Runner runner(plan);
      runner.run(Random(20 + i).tensor(net.input));
      alone.push_back(to_tensor(runner.output()));
    }
    std::vector<Tensor> together(4);
    std::vector<std::thread> threads;
    for (std::size_t i = 0; i < 4; ++i) {
      threads.emplace_back([&, i] {
        Runner runner(plan);
        for (int round = 0; round < 3; ++round) {
          runner.run(Random(20 + i).tensor(net.input));
          together[i] = to_tensor(runner.output());
        }
      });
    }
    for (std::thread& thread : threads) thread.join();
    for (std::size_t i = 0; i < 4; ++i) testing::expect_same_bits(together[i], alone[i]);
  }
}

TEST(Runner, RefusesInputsOfAnotherShape) {
  const Net net = nets().front();
  Runner runner(Plan::make(net.builder.graph(), net.builder.weights(), options_for(net)));
  EXPECT_THROW(runner.run(Tensor({1, 3, 24, 21})), Error);
  EXPECT_THROW(runner.run(std::span<const Tensor>{}), Error);
  EXPECT_THROW(runner.output(1), Error);
}

TEST(Hooks, SeeEveryLayerOfAnObservedPlan) {
  for (const Net& net : nets()) {
    SCOPED_TRACE(net.name);
    const Tensor input = Random(10).tensor(net.input);
    PlanOptions options = options_for(net);
    options.observe = {"*"};
    const auto plan = Plan::make(net.builder.graph(), net.builder.weights(), options);
    PlanOptions oracle_options = options;
    oracle_options.reference_kernels = true;
    Runner oracle(Plan::make(net.builder.graph(), net.builder.weights(), oracle_options));
    std::map<std::string, Tensor> expected;
    oracle.add_hook("*", [&](const HookedOutput& out) { expected[out.layer()] = out.read(); });
    oracle.run(input);

    Runner runner(plan);
    std::vector<std::string> seen;
    runner.add_hook("*", [&](const HookedOutput& out) {
      seen.push_back(out.layer());
      EXPECT_LT(relative_error(out.read(), expected.at(out.layer())), 5e-6) << out.layer();
    });
    runner.run(input);
    ASSERT_EQ(seen.size(), plan->layers().size());
    for (std::size_t i = 0; i < seen.size(); ++i) EXPECT_EQ(seen[i], plan->layers()[i].name);
  }
}

TEST(Hooks, EachLayerCanBeObservedAloneWithoutChangingTheAnswer) {
  for (const Net& net : nets()) {
    SCOPED_TRACE(net.name);
    const Tensor input = Random(11).tensor(net.input);
    const auto whole_plan =
        Plan::make(net.builder.graph(), net.builder.weights(), options_for(net));
    Runner whole(whole_plan);
    whole.run(input);
    const Tensor expected = to_tensor(whole.output());
    for (const LayerSummary& layer : whole_plan->layers()) {
      SCOPED_TRACE(layer.name);
      PlanOptions options = options_for(net);
      options.observe = {layer.name};
      const auto plan = Plan::make(net.builder.graph(), net.builder.weights(), options);
      Runner runner(plan);
      int calls = 0;
      runner.add_hook(layer.name, [&](const HookedOutput&) { ++calls; });
      runner.run(input);
      EXPECT_EQ(calls, 1);
      if (plan->steps().size() == whole_plan->steps().size()) {
        testing::expect_same_bits(to_tensor(runner.output()), expected);
      } else {
        EXPECT_LT(relative_error(to_tensor(runner.output()), expected), 2e-6);
      }
    }
  }
}

TEST(Hooks, CanReplaceAnOutput) {
  for (const Net& net : nets()) {
    SCOPED_TRACE(net.name);
    const std::string last = net.builder.graph().layers[net.builder.graph().layers.size() - 2].name;
    PlanOptions options = options_for(net);
    options.observe = {last};
    Runner runner(Plan::make(net.builder.graph(), net.builder.weights(), options));
    runner.add_hook(last, [](const HookedOutput& out) { out.replace(Tensor(out.shape())); });
    runner.run(Random(12).tensor(net.input));
    // The head sees zeros: what is left is its bias.
    const Tensor result = to_tensor(runner.output());
    const Tensor& bias = net.builder.weights().find("head.bias")->second;
    for (std::int64_t n = 0; n < net.input[0]; ++n) {
      for (std::int64_t c = 0; c < 10; ++c) {
        EXPECT_EQ(result.data()[n * 10 + c], bias.data()[c]);
      }
    }
  }
}

// Replacing what a view shows must not reach the other readers of the layer behind it.
TEST(Hooks, ReplacingAViewLeavesItsSourceAlone) {
  GraphBuilder b;
  b.image(3, 4, 4);
  b.conv("conv", "image", 3, 4, 1);
  b.layer("view", "identity", {"conv"});
  b.activation("side", "conv", "tanh");
  b.layer("add", "add", {"view", "side"});
  b.output("add");
  PlanOptions options;
  options.observe = {"view"};
  const Tensor input = Random(13).tensor({1, 3, 4, 4});
  const auto plan = Plan::make(b.graph(), b.weights(), options);
  Runner runner(plan);
  runner.add_hook("view", [](const HookedOutput& out) { out.replace(Tensor(out.shape())); });
  runner.run(input);
  const Tensor ablated = to_tensor(runner.output());

  PlanOptions side_options;
  side_options.observe = {"side"};
  Runner plain(Plan::make(b.graph(), b.weights(), side_options));
  Tensor side;
  plain.add_hook("side", [&](const HookedOutput& out) { side = out.read(); });
  plain.run(input);
  EXPECT_LT(relative_error(ablated, side), 1e-6);
}

TEST(Hooks, SayWhyALayerCannotBeHooked) {
  const Net net = nets().front();
  Runner runner(Plan::make(net.builder.graph(), net.builder.weights(), options_for(net)));
  try {
    runner.add_hook("stem.bn", [](const HookedOutput&) {});
    FAIL() << "accepted";
  } catch (const Error& error) {
    EXPECT_EQ(error.kind(), ErrorKind::kUsage);
    EXPECT_NE(std::string(error.what()).find("PlanOptions::observe"), std::string::npos);
  }
  try {
    runner.add_hook("stem.poool", [](const HookedOutput&) {});
    FAIL() << "accepted";
  } catch (const Error& error) {
    EXPECT_NE(std::string(error.what()).find("nearest: 'stem.pool'"), std::string::npos);
  }
}

TEST(Hooks, AnExceptionEndsTheRunAndLeavesTheRunnerUsable) {
  const Net net = nets().front();
  Runner runner(Plan::make(net.builder.graph(), net.builder.weights(), options_for(net)));
  const Tensor input = Random(14).tensor(net.input);
  runner.run(input);
  const Tensor expected = to_tensor(runner.output());
  runner.add_hook("stem.pool", [](const HookedOutput&) { throw std::runtime_error("enough"); });
  EXPECT_THROW(runner.run(input), std::runtime_error);
  runner.clear_hooks();
  runner.run(input);
  testing::expect_same_bits(to_tensor(runner.output()), expected);
}

TEST(Hooks, AttentionWeightsAreRowsOfProbabilities) {
  const Net net = nets()[3];
  PlanOptions options = options_for(net);
  options.observe = {"*:weights"};
  Runner runner(Plan::make(net.builder.graph(), net.builder.weights(), options));
  int layers = 0;
  runner.add_hook("*:weights", [&](const HookedOutput& out) {
    ++layers;
    const Tensor weights = out.read();
    const std::int64_t tokens = weights.shape()[3];
    ASSERT_EQ(tokens, 1 + 5 * 7);  // class token and 20/4 x 28/4 patches
    for (std::int64_t row = 0; row < weights.elements() / tokens; ++row) {
      double sum = 0.0;
      for (std::int64_t t = 0; t < tokens; ++t) {
        EXPECT_GE(weights.data()[row * tokens + t], 0.0F);
        sum += static_cast<double>(weights.data()[row * tokens + t]);
      }
      EXPECT_NEAR(sum, 1.0, 1e-5);
    }
  });
  runner.run(Random(15).tensor(net.input));
  EXPECT_EQ(layers, 2);
}

TEST(Profile, CountsRunsAndTime) {
  const Net net = nets().front();
  Runner runner(Plan::make(net.builder.graph(), net.builder.weights(), options_for(net)));
  runner.enable_profile(true);
  for (int i = 0; i < 3; ++i) runner.run(Random(16).tensor(net.input));
  const Profile& profile = runner.profile();
  ASSERT_EQ(profile.steps.size(), runner.plan().steps().size());
  double sum = 0.0;
  for (const PartTime& step : profile.steps) sum += step.total_seconds;
  EXPECT_EQ(profile.whole.runs, 3);
  EXPECT_GT(sum, 0.0);
  EXPECT_EQ(profile.input.runs, 3);
  EXPECT_LE(sum + profile.input.total_seconds, profile.whole.total_seconds);
}

}  // namespace
}  // namespace leadsman
