#include "leadsman/graph.h"

#include <algorithm>
#include <functional>
#include <set>

#include <gtest/gtest.h>

#include "tests/support/graph_builder.h"

namespace leadsman {
namespace {

using testing::GraphBuilder;

struct BadGraph {
  const char* what;
  std::function<void(Graph&)> spoil;
  const char* path;
  const char* message;
};

// Layers of small_conv_net by index: 0 stem.conv, 1 stem.bn, 2 stem.relu, 3 stem.pool, ...
const BadGraph kBadGraphs[] = {
    {"no inputs", [](Graph& g) { g.inputs.clear(); }, "/inputs", "at least one input"},
    {"no outputs", [](Graph& g) { g.outputs.clear(); }, "/outputs", "at least one output"},
    {"unknown input", [](Graph& g) { g.layers[2].inputs[0] = "stem.bm"; }, "/layers/2/inputs/0",
     "no layer or input is called 'stem.bm'; nearest: 'stem.bn'"},
    {"unknown output", [](Graph& g) { g.outputs[0] = "heat"; }, "/outputs/0", "nearest: 'head'"},
    {"output twice", [](Graph& g) { g.outputs.push_back("head"); }, "/outputs/1", "output twice"},
    {"duplicate layer", [](Graph& g) { g.layers[3].name = "stem.bn"; }, "/layers/3/name",
     "'stem.bn' is used twice"},
    {"layer named as the input", [](Graph& g) { g.layers[3].name = "image"; }, "/layers/3/name",
     "'image' is used twice"},
    {"empty name", [](Graph& g) { g.layers[3].name.clear(); }, "/layers/3/name", "empty"},
    {"colon", [](Graph& g) { g.layers[3].name = "a:weights"; }, "/layers/3/name", "':'"},
    {"cycle", [](Graph& g) { g.layers[0].inputs[0] = "head"; }, "/layers/0/inputs",
     "there is a cycle"},
    {"own input", [](Graph& g) { g.layers[2].inputs[0] = "stem.relu"; }, "/layers/2/inputs",
     "there is a cycle"},
    {"unknown operator", [](Graph& g) { g.layers[2].operator_name = "activator"; },
     "/layers/2/operator", "no operator is called 'activator'; nearest: 'activation'"},
    {"too many inputs", [](Graph& g) { g.layers[2].inputs.push_back("image"); }, "/layers/2/inputs",
     "activation takes 1 inputs, not 2"},
    {"no inputs of a layer", [](Graph& g) { g.layers[2].inputs.clear(); }, "/layers/2/inputs",
     "not 0"},
    {"unknown attribute", [](Graph& g) { g.layers[0].attributes.set("strides", std::int64_t{1}); },
     "/layers/0/attributes", "strides: conv2d has no such attribute; nearest: 'stride'"},
    {"missing attribute", [](Graph& g) { g.layers[0].attributes = {}; }, "/layers/0/attributes",
     "kernel_size: missing"},
    {"attribute below its minimum",
     [](Graph& g) { g.layers[0].attributes.set("stride", std::int64_t{0}); },
     "/layers/0/attributes", "stride: 0 is below 1"},
    {"attribute of another type",
     [](Graph& g) { g.layers[0].attributes.set("stride", std::string("two")); },
     "/layers/0/attributes", "stride: is not an integer or [height, width]"},
    {"word outside the choices",
     [](Graph& g) { g.layers[2].attributes.set("kind", std::string("rely")); },
     "/layers/2/attributes", "kind: 'rely' is none of"},
    {"missing weight role", [](Graph& g) { g.layers[0].weights.clear(); }, "/layers/0/weights",
     "conv2d needs a 'weight'"},
    {"unknown weight role", [](Graph& g) { g.layers[0].weights["biass"] = "x"; },
     "/layers/0/weights/biass", "nearest: 'bias'"},
    {"input of rank 5",
     [](Graph& g) {
       g.inputs[0].shape = {1, 1, 1, 1, 1};
     },
     "/inputs/0/shape", "has 5 sizes"},
    {"input of size 0", [](Graph& g) { g.inputs[0].shape[1] = 0; }, "/inputs/0/shape/1", "below 1"},
    {"usual size 0", [](Graph& g) { g.inputs[0].usual_size[0] = 0; }, "/inputs/0/usual_size/0",
     "below 1"},
};

TEST(CheckGraph, NamesThePlaceOfEveryMistake) {
  for (const BadGraph& bad : kBadGraphs) {
    SCOPED_TRACE(bad.what);
    Graph graph = testing::small_conv_net().graph();
    bad.spoil(graph);
    try {
      check_graph(graph);
      ADD_FAILURE() << "accepted";
    } catch (const GraphError& error) {
      EXPECT_EQ(error.path(), bad.path);
      EXPECT_NE(std::string(error.what()).find(bad.message), std::string::npos) << error.what();
    }
  }
}

TEST(CheckGraph, SortsLayersThatComeInAnyOrder) {
  Graph graph = testing::small_conv_net().graph();
  std::vector<std::string> order;
  for (const Layer& layer : graph.layers) order.push_back(layer.name);
  std::reverse(graph.layers.begin(), graph.layers.end());
  check_graph(graph);
  std::set<std::string> done{"image"};
  for (const Layer& layer : graph.layers) {
    for (const std::string& input : layer.inputs) EXPECT_TRUE(done.contains(input)) << layer.name;
    done.insert(layer.name);
  }
  EXPECT_EQ(done.size(), order.size() + 1);
}

TEST(CheckGraph, KeepsASortedOrder) {
  Graph graph = testing::small_conv_net().graph();
  const Graph before = graph;
  check_graph(graph);
  for (std::size_t i = 0; i < before.layers.size(); ++i) {
    EXPECT_EQ(graph.layers[i].name, before.layers[i].name);
  }
}

TEST(CheckGraph, FillsInDefaults) {
  Graph graph = testing::small_conv_net().graph();
  check_graph(graph);
  const Attributes& conv = graph.find_layer("stem.conv")->attributes;
  EXPECT_EQ(conv.integers("padding"), (std::vector<std::int64_t>{1, 1, 1, 1}));
  EXPECT_EQ(conv.integers("dilation"), (std::vector<std::int64_t>{1, 1}));
  EXPECT_EQ(conv.integer("groups"), 1);
}

}  // namespace
}  // namespace leadsman
