#include "leadsman/compare.h"

#include <algorithm>
#include <cmath>
#include <functional>
#include <limits>

#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "leadsman/runner.h"
#include "tests/support/graph_builder.h"

namespace leadsman {
namespace {

using testing::GraphBuilder;
using testing::Random;

using Tensors = std::map<std::string, Tensor>;

// What the oracle computes for every layer, as another library would have stored it.
Tensors reference_of(const GraphBuilder& b, const Shape& input_shape) {
  PlanOptions options;
  options.input_shapes = {input_shape};
  options.reference_kernels = true;
  options.observe = {"*"};
  Runner runner(Plan::make(b.graph(), b.weights(), options));
  Tensors tensors;
  tensors["image"] = Random(3).tensor(input_shape);
  runner.add_hook("*", [&](const HookedOutput& out) { tensors[out.layer()] = out.read(); });
  runner.run(tensors["image"]);
  return tensors;
}

ReferenceSource source_of(const Tensors& tensors) {
  return [&tensors](const std::string& name) -> std::optional<Tensor> {
    const auto found = tensors.find(name);
    if (found == tensors.end()) return std::nullopt;
    return found->second;
  };
}

Comparison compare_with(const GraphBuilder& b, const Tensors& tensors,
                        CompareMode mode = CompareMode::kIsolated) {
  CompareOptions options;
  options.mode = mode;
  options.threads = 2;
  return compare(b.graph(), b.weights(), source_of(tensors), options);
}

struct Case {
  const char* name;
  GraphBuilder builder;
  Shape input;
};

std::vector<Case> cases() {
  return {{"conv", testing::small_conv_net(4), {2, 3, 24, 20}},
          {"transformer", testing::small_transformer(4), {2, 3, 16, 16}}};
}

TEST(Compare, FindsNoDepartureWhereThereIsNone) {
  for (const Case& c : cases()) {
    const Tensors tensors = reference_of(c.builder, c.input);
    for (const CompareMode mode : {CompareMode::kIsolated, CompareMode::kChained}) {
      const Comparison result = compare_with(c.builder, tensors, mode);
      SCOPED_TRACE(c.name);
      EXPECT_EQ(result.layers.size(), c.builder.graph().layers.size());
      EXPECT_EQ(result.first_departure, "");
      EXPECT_LT(result.worst_ratio, 0.7) << result.worst_layer;
      EXPECT_GT(result.worst_ratio, 1e-3) << "a threshold that nothing comes near finds nothing";
      EXPECT_LT(result.output_relative_l2, 1e-5);
    }
  }
}

struct Mistake {
  const char* what;
  const char* layer;  // where it is found
  std::function<void(GraphBuilder&)> make;
};

Layer& layer_of(GraphBuilder& b, std::string_view name) {
  for (Layer& layer : b.graph().layers) {
    if (layer.name == name) return layer;
  }
  throw std::logic_error("no such layer");
}

// The mistakes that porting a network is made of (common practice, no source).
const Mistake kConvMistakes[] = {
    {"batch-norm eps", "a.bn1",
     [](GraphBuilder& b) { layer_of(b, "a.bn1").attributes.set("eps", 1e-3); }},
    {"padding on the other side", "b.conv1",
     [](GraphBuilder& b) {
       layer_of(b, "b.conv1").attributes.set("padding", std::vector<std::int64_t>{0, 0, 2, 2});
     }},
    {"activation", "b.relu2",
     [](GraphBuilder& b) { layer_of(b, "b.relu2").attributes.set("kind", std::string("silu")); }},
    {"one weight of 2304 off by 1 %", "a.conv1",
     [](GraphBuilder& b) { b.weights()["a.conv1.weight"].mutable_data()[77] *= 1.01F; }},
    {"mirrored kernel", "a.conv2",
     [](GraphBuilder& b) {
       Tensor& w = b.weights()["a.conv2.weight"];
       for (std::int64_t i = 0; i < w.elements() / 9; ++i) {
         std::reverse(w.mutable_data() + i * 9, w.mutable_data() + i * 9 + 9);
       }
     }},
    {"missing bias", "head", [](GraphBuilder& b) { layer_of(b, "head").weights.erase("bias"); }},
};

const Mistake kTransformerMistakes[] = {
    {"layer-norm eps", "block0.norm1",
     [](GraphBuilder& b) { layer_of(b, "block0.norm1").attributes.set("eps", 1e-3); }},
    {"tanh form of GELU", "block1.gelu",
     [](GraphBuilder& b) {
       layer_of(b, "block1.gelu").attributes.set("kind", std::string("gelu_tanh"));
     }},
    {"attention scale of the whole width", "block0.attention",
     [](GraphBuilder& b) {
       layer_of(b, "block0.attention").attributes.set("scale", 1.0 / std::sqrt(24.0));
     }},
    {"heads", "block1.attention",
     [](GraphBuilder& b) {
       layer_of(b, "block1.attention").attributes.set("heads", std::int64_t{6});
     }},
    {"last token instead of the class token", "select",
     [](GraphBuilder& b) { layer_of(b, "select").attributes.set("index", std::int64_t{16}); }},
};

void expect_found(const Case& c, std::span<const Mistake> mistakes) {
  const Tensors tensors = reference_of(c.builder, c.input);
  for (const Mistake& mistake : mistakes) {
    SCOPED_TRACE(mistake.what);
    GraphBuilder wrong = c.builder;
    mistake.make(wrong);
    const Comparison isolated = compare_with(wrong, tensors);
    EXPECT_EQ(isolated.first_departure, mistake.layer);
    int departures = 0;
    for (const LayerComparison& layer : isolated.layers) departures += layer.departs ? 1 : 0;
    EXPECT_EQ(departures, 1) << "an isolated error belongs to one layer alone";
    EXPECT_EQ(compare_with(wrong, tensors, CompareMode::kChained).first_departure, mistake.layer);
  }
}

TEST(Compare, NamesTheLayerOfEveryMistake) {
  const std::vector<Case> all = cases();
  expect_found(all[0], kConvMistakes);
  expect_found(all[1], kTransformerMistakes);
}

TEST(Compare, SaysWhenShapesOrValuesAreNoMatch) {
  const Case c = cases()[0];
  Tensors tensors = reference_of(c.builder, c.input);
  tensors["pool"] = tensors["pool"].reshaped({2, 1, 32, 1});
  tensors["stem.relu"].mutable_data()[5] = std::numeric_limits<float>::quiet_NaN();
  const Comparison result = compare_with(c.builder, tensors);
  EXPECT_EQ(result.first_departure, "stem.relu");
  for (const LayerComparison& layer : result.layers) {
    if (layer.layer == "stem.relu") {
      EXPECT_EQ(layer.remark, "not finite");
    }
    if (layer.layer == "pool") {
      EXPECT_TRUE(layer.departs);
      EXPECT_EQ(layer.remark, "shape [2, 32, 1, 1] instead of [2, 1, 32, 1]");
    }
  }
}

TEST(Compare, ListsLayersWithoutAReference) {
  const Case c = cases()[0];
  Tensors tensors = reference_of(c.builder, c.input);
  tensors.erase("head");
  const Comparison result = compare_with(c.builder, tensors);
  EXPECT_EQ(result.missing, std::vector<std::string>{"head"});
  EXPECT_EQ(result.first_departure, "");
}

TEST(Compare, NeedsAnInputAndALayer) {
  const Case c = cases()[0];
  const Tensors tensors = reference_of(c.builder, c.input);
  EXPECT_THROW(compare_with(c.builder, {}), Error);
  EXPECT_THROW(compare_with(c.builder, {{"image", tensors.at("image")}}), Error);
}

TEST(MeasureDifference, AgreesWithItsDefinition) {
  const Tensor reference({1, 4}, {3, 0, 4, 0});
  const Tensor ours({1, 4}, {3, 0, 4, 1});
  const LayerComparison row = measure_difference(ours, reference);
  EXPECT_DOUBLE_EQ(row.relative_l2, 1.0 / 5.0);
  EXPECT_DOUBLE_EQ(row.max_over_rms, 1.0 / 2.5);
  EXPECT_DOUBLE_EQ(row.cosine, 25.0 / (5.0 * std::sqrt(26.0)));
  EXPECT_EQ(measure_difference(reference, reference).relative_l2, 0.0);
}

}  // namespace
}  // namespace leadsman
