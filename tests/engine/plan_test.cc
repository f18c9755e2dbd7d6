#include "leadsman/plan.h"

#include <algorithm>

#include <gtest/gtest.h>

#include "engine/plan_state.h"
#include "leadsman/error.h"
#include "tests/support/graph_builder.h"

namespace leadsman {
namespace {

using testing::GraphBuilder;

std::shared_ptr<const Plan> make(const GraphBuilder& b, const PlanOptions& options = {}) {
  return Plan::make(b.graph(), b.weights(), options);
}

std::vector<std::string> step_with(const Plan& plan, const std::string& layer) {
  for (const StepSummary& step : plan.steps()) {
    if (std::ranges::find(step.layers, layer) != step.layers.end()) return step.layers;
  }
  return {};
}

using Names = std::vector<std::string>;

TEST(Fusion, FoldsNormResidualAndActivationIntoTheConvolution) {
  const auto plan = make(testing::small_conv_net());
  EXPECT_EQ(step_with(*plan, "stem.conv"), (Names{"stem.conv", "stem.bn", "stem.relu"}));
  EXPECT_EQ(step_with(*plan, "a.conv2"), (Names{"a.conv2", "a.bn2", "a.add", "a.relu2"}));
}

TEST(Fusion, GivesTheResidualToTheBranchComputedLast) {
  const auto plan = make(testing::small_conv_net());
  EXPECT_EQ(step_with(*plan, "b.conv2"), (Names{"b.conv2", "b.bn2"}));
  EXPECT_EQ(step_with(*plan, "b.down.conv"),
            (Names{"b.down.conv", "b.down.bn", "b.add", "b.relu2"}));
}

TEST(Fusion, SeesThroughAShortcutThatIsAView) {
  GraphBuilder b;
  b.image(3, 6, 6);
  b.conv("first", "image", 3, 4, 1);
  b.conv("main", "first", 4, 4, 3);
  b.layer("shortcut", "identity", {"first"});
  b.layer("add", "add", {"main", "shortcut"});
  b.output("add");
  EXPECT_EQ(step_with(*make(b), "main"), (Names{"main", "add"}));
  PlanOptions options;
  options.observe = {"shortcut"};
  EXPECT_EQ(step_with(*make(b, options), "main"), (Names{"main"}));
}

TEST(Fusion, FoldsScalesIntoTheProductsBeforeThem) {
  const GraphBuilder b = testing::small_scaled_net();
  const auto plan = make(b);
  EXPECT_EQ(step_with(*plan, "conv"), (Names{"conv", "norm", "affine"}));
  EXPECT_EQ(step_with(*plan, "fc"), (Names{"fc", "layer_scale", "add", "gelu"}));
  PlanOptions options;
  options.observe = {"norm", "fc"};
  const auto cut = make(b, options);
  EXPECT_EQ(step_with(*cut, "conv"), (Names{"conv", "norm"}));
  EXPECT_EQ(step_with(*cut, "affine"), (Names{"affine"}));
  EXPECT_EQ(step_with(*cut, "fc"), (Names{"fc"}));
  EXPECT_EQ(step_with(*cut, "layer_scale"), (Names{"layer_scale"}));
}

TEST(Fusion, LeavesAScaleBehindAnActivationOrASumAlone) {
  GraphBuilder b;
  b.image(3, 6, 6);
  b.layer("after_relu", "scale", {b.activation("relu", b.conv("first", "image", 3, 4, 3))},
          {{"factor", 2.0}});
  b.layer("sum", "add", {b.conv("second", "after_relu", 4, 4, 3), "after_relu"});
  b.layer("after_sum", "scale", {"sum"}, {{"factor", 2.0}});
  b.output("after_sum");
  const auto plan = make(b);
  EXPECT_EQ(step_with(*plan, "first"), (Names{"first", "relu"}));
  EXPECT_EQ(step_with(*plan, "second"), (Names{"second", "sum"}));
  EXPECT_EQ(step_with(*plan, "after_relu"), (Names{"after_relu"}));
  EXPECT_EQ(step_with(*plan, "after_sum"), (Names{"after_sum"}));
}

TEST(Fusion, TakesGeluAndResidualIntoTransformerProducts) {
  const auto plan = make(testing::small_transformer());
  EXPECT_EQ(step_with(*plan, "block0.fc1"), (Names{"block0.fc1", "block0.gelu"}));
  EXPECT_EQ(step_with(*plan, "block0.fc2"), (Names{"block0.fc2", "block0.add2"}));
  EXPECT_EQ(step_with(*plan, "block0.out_proj"), (Names{"block0.out_proj", "block0.add1"}));
}

TEST(Fusion, IsCutAfterAnObservedLayerAndNowhereElse) {
  const GraphBuilder b = testing::small_conv_net();
  const auto whole = make(b);
  PlanOptions options;
  options.observe = {"a.bn2"};
  const auto cut = make(b, options);
  EXPECT_EQ(step_with(*cut, "a.conv2"), (Names{"a.conv2", "a.bn2"}));
  EXPECT_EQ(step_with(*cut, "a.add"), (Names{"a.add", "a.relu2"}));
  EXPECT_EQ(cut->steps().size(), whole->steps().size() + 1);
  for (const StepSummary& step : whole->steps()) {
    if (step.layers.front() == "a.conv2") continue;
    EXPECT_EQ(step_with(*cut, step.layers.front()), step.layers);
  }
}

TEST(Fusion, ObservingAStepsLastLayerCutsNothing) {
  const GraphBuilder b = testing::small_conv_net();
  PlanOptions options;
  options.observe = {"a.relu2", "stem.pool"};
  EXPECT_EQ(make(b, options)->steps().size(), make(b)->steps().size());
}

TEST(Fusion, NothingIsFusedInAnOraclePlan) {
  PlanOptions options;
  options.reference_kernels = true;
  const auto plan = make(testing::small_conv_net(), options);
  EXPECT_EQ(plan->steps().size(), plan->layers().size());
  for (const StepSummary& step : plan->steps()) {
    EXPECT_TRUE(step.strategy == "reference" || step.strategy == "view") << step.strategy;
  }
}

TEST(Plan, AddsAStepForObservedAttentionWeights) {
  PlanOptions options;
  options.observe = {"block1.attention:weights"};
  const auto plan = make(testing::small_transformer(), options);
  const auto names = plan->observable();
  EXPECT_NE(std::ranges::find(names, "block1.attention:weights"), names.end());
  EXPECT_EQ(std::ranges::find(names, "block0.attention:weights"), names.end());
}

TEST(Plan, SaysWhichLayerAndShapesDoNotMeet) {
  GraphBuilder b = testing::small_conv_net();
  b.weights()["a.conv1.weight"] = Tensor({16, 8, 3, 3});
  try {
    make(b);
    FAIL() << "accepted";
  } catch (const Error& error) {
    EXPECT_EQ(error.kind(), ErrorKind::kInput);
    EXPECT_STREQ(error.what(),
                 "layer 'a.conv1' (conv2d): weight has shape [16, 8, 3, 3], expected "
                 "[16, 16, 3, 3]");
  }
}

TEST(Plan, NamesAMissingTensorAndItsNearest) {
  GraphBuilder b = testing::small_conv_net();
  b.weights()["head.wieght"] = b.weights()["head.weight"];
  b.weights().erase("head.weight");
  try {
    make(b);
    FAIL() << "accepted";
  } catch (const Error& error) {
    EXPECT_EQ(error.kind(), ErrorKind::kInput);
    EXPECT_NE(std::string(error.what()).find("nearest: 'head.wieght'"), std::string::npos)
        << error.what();
  }
}

struct BadOptions {
  const char* what;
  PlanOptions options;
  const char* message;
};

TEST(Plan, RefusesOptionsThatDoNotFit) {
  std::vector<BadOptions> bad(6);
  bad[0].what = "pattern without a match";
  bad[0].options.observe = {"a.relu3"};
  bad[0].message = "no layer matches 'a.relu3'; nearest: 'a.relu";
  bad[1].what = "weights of what is no attention";
  bad[1].options.observe = {"a.relu2:weights"};
  bad[1].message = "no layer matches";
  bad[2].what = "another number of channels";
  bad[2].options.input_shapes = {{1, 4, 24, 20}};
  bad[2].message = "input 'image' cannot have shape [1, 4, 24, 20], the graph says [any, 3";
  bad[3].what = "an empty batch";
  bad[3].options.input_shapes = {{0, 3, 24, 20}};
  bad[3].message = "cannot have shape";
  bad[4].what = "two inputs";
  bad[4].options.input_shapes = {{1, 3, 24, 20}, {1, 3, 24, 20}};
  bad[4].message = "1 inputs, not 2";
  bad[5].what = "threads";
  bad[5].options.threads = -1;
  bad[5].message = "threads: -1";
  for (const BadOptions& each : bad) {
    SCOPED_TRACE(each.what);
    try {
      make(testing::small_conv_net(), each.options);
      ADD_FAILURE() << "accepted";
    } catch (const Error& error) {
      EXPECT_EQ(error.kind(), ErrorKind::kUsage);
      EXPECT_NE(std::string(error.what()).find(each.message), std::string::npos) << error.what();
    }
  }
}

// What the memory pass promises: values that are alive at the same time share no byte, unless one
// is the other's storage.
TEST(Memory, ValuesAliveTogetherNeverOverlap) {
  for (const bool observed : {false, true}) {
    for (const GraphBuilder& b : {testing::small_conv_net(), testing::small_transformer()}) {
      PlanOptions options;
      if (observed) options.observe = {"*"};
      const auto plan = make(b, options);
      const internal::PlanState& state = plan->state();
      const std::size_t end = state.steps.size() + 1;
      std::vector<std::size_t> first(state.values.size(), end);
      std::vector<std::size_t> last(state.values.size(), 0);
      const auto touch = [&](internal::ValueId value, std::size_t when) {
        first[value] = std::min(first[value], when);
        last[value] = std::max(last[value], when);
      };
      for (std::size_t i = 0; i < b.graph().inputs.size(); ++i) touch(i, 0);
      for (std::size_t s = 0; s < state.steps.size(); ++s) {
        for (const internal::ValueId input : state.steps[s].inputs) touch(input, s + 1);
        if (state.steps[s].residual) touch(*state.steps[s].residual, s + 1);
        touch(state.steps[s].output, s + 1);
      }
      for (const internal::ValueId output : state.outputs) touch(output, end);
      for (internal::ValueId i = 0; i < state.values.size(); ++i) {
        for (internal::ValueId j = 0; j < i; ++j) {
          const internal::Value& a = state.values[i];
          const internal::Value& c = state.values[j];
          if (first[i] > last[j] || first[j] > last[i] || a.storage == c.storage) continue;
          const std::size_t a_end =
              a.offset_bytes + static_cast<std::size_t>(a.shape.elements()) * 4;
          const std::size_t c_end =
              c.offset_bytes + static_cast<std::size_t>(c.shape.elements()) * 4;
          EXPECT_TRUE(a_end <= c.offset_bytes || c_end <= a.offset_bytes)
              << a.name << " and " << c.name;
          EXPECT_LE(a_end, plan->arena_bytes());
        }
      }
    }
  }
}

TEST(Memory, ReusesWhatIsNoLongerNeeded) {
  const auto plan = make(testing::small_conv_net());
  std::size_t sum = 0;
  for (const LayerSummary& layer : plan->layers()) {
    sum += static_cast<std::size_t>(layer.activation_bytes);
  }
  EXPECT_LT(plan->arena_bytes(), sum / 2);
}

TEST(Plan, CountsParametersOnceAndLeavesRunningStatisticsOut) {
  GraphBuilder b;
  b.image(3, 8, 8);
  b.conv("one", "image", 3, 3, 1);
  b.batch_norm("norm", "one", 3);
  b.layer("two", "conv2d", {"norm"}, {{"kernel_size", std::int64_t{1}}});
  b.graph().layers.back().weights["weight"] = "one.weight";
  b.output("two");
  const auto plan = make(b);
  EXPECT_EQ(plan->parameters(), 9 + 3 + 3);
  EXPECT_EQ(plan->layers()[1].parameters, 6);
}

}  // namespace
}  // namespace leadsman
