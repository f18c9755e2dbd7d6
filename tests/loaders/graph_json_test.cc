#include <string>
#include <utility>
#include <vector>

#include <gtest/gtest.h>

#include "leadsman/bundle.h"
#include "tests/loaders/graph_examples.h"
#include "tests/support/files.h"

namespace leadsman {
namespace {

using testing::graph_with;
using testing::input_error;
using testing::kGraphText;
using Integers = std::vector<std::int64_t>;
using Numbers = std::vector<double>;

TEST(GraphJson, ReadsEverything) {
  const GraphDocument document = parse_graph(kGraphText, "graph.json");
  const Graph& graph = document.graph;
  EXPECT_EQ(graph.name, "small");
  ASSERT_EQ(graph.inputs.size(), 1u);
  EXPECT_EQ(graph.inputs[0].name, "image");
  EXPECT_EQ(graph.inputs[0].shape, (Integers{GraphInput::kFree, 3, GraphInput::kFree, -1}));
  EXPECT_EQ(graph.inputs[0].usual_size, (Integers{8, 6}));
  EXPECT_EQ(graph.outputs, std::vector<std::string>{"sum"});
  ASSERT_EQ(graph.layers.size(), 4u);
  const Layer& conv = *graph.find_layer("conv2");
  EXPECT_EQ(conv.operator_name, "conv2d");
  EXPECT_EQ(conv.inputs, std::vector<std::string>{"relu1"});
  EXPECT_EQ(conv.attributes.integers("kernel_size"), (Integers{3, 3}));
  EXPECT_EQ(conv.weights.at("bias"), "conv2.bias");
  EXPECT_EQ(graph.find_layer("relu1")->attributes.text("kind"), "relu");
  EXPECT_EQ(graph.find_layer("conv1")->attributes.integers("padding"), (Integers{1, 1, 1, 1}));
  ASSERT_TRUE(document.preprocess);
  const Preprocess& preprocess = *document.preprocess;
  EXPECT_EQ(preprocess.shorter_side, 10);
  EXPECT_FALSE(preprocess.exact);
  EXPECT_EQ(preprocess.interpolation, Interpolation::kBicubic);
  EXPECT_EQ(preprocess.crop, (PictureSize{8, 6}));
  EXPECT_EQ(preprocess.channels, Channels::kBgr);
  EXPECT_EQ(preprocess.orientation, Orientation::kExif);
  EXPECT_EQ(preprocess.scale, 1.0);
  EXPECT_EQ(preprocess.mean, (Numbers{1, 2, 3}));
  EXPECT_EQ(preprocess.stddev, (Numbers{4, 5, 6.5}));
}

TEST(GraphJson, LayersMayComeInAnyOrder) {
  const Graph graph = parse_graph(R"({"leadsman_graph": 1, "name": "g", "outputs": ["b"],
                      "layers": [{"name": "b", "operator": "add", "inputs": ["a", "x"]},
                                 {"name": "a", "operator": "activation", "inputs": ["x"],
                                  "attributes": {"kind": "relu"}}],
                      "inputs": [{"name": "x", "shape": ["N", "T", 4]}]})",
                                  "graph.json")
                          .graph;
  EXPECT_EQ(graph.layers[0].name, "a");
  EXPECT_EQ(graph.layers[1].name, "b");
  EXPECT_EQ(graph.inputs[0].shape, (Integers{-1, -1, 4}));
}

TEST(GraphJson, IsWrittenAsItIsRead) {
  const GraphDocument first = parse_graph(kGraphText, "graph.json");
  const std::string text = graph_text(first.graph, first.preprocess);
  const GraphDocument second = parse_graph(text, "written");
  EXPECT_EQ(graph_text(second.graph, second.preprocess), text);
  EXPECT_EQ(text, R"({
  "leadsman_graph": 1,
  "name": "small",
  "inputs": [{"name": "image", "shape": ["N", 3, "H", "W"], "usual_size": [8, 6]}],
  "outputs": ["sum"],
  "layers": [
    {"name": "conv1", "operator": "conv2d", "inputs": ["image"],
     "attributes": {"kernel_size": [3, 3], "padding": [1, 1, 1, 1]},
     "weights": {"weight": "conv1.weight"}},
    {"name": "relu1", "operator": "activation", "inputs": ["conv1"],
     "attributes": {"kind": "relu"}},
    {"name": "conv2", "operator": "conv2d", "inputs": ["relu1"],
     "attributes": {"kernel_size": [3, 3], "padding": [1, 1, 1, 1]},
     "weights": {"bias": "conv2.bias", "weight": "conv2.weight"}},
    {"name": "sum", "operator": "add", "inputs": ["conv2", "relu1"]}
  ],
  "preprocess": {"resize": {"shorter_side": 10, "interpolation": "bicubic"}, "crop": [8, 6], "channels": "BGR", "orientation": "exif", "scale": 1.0, "mean": [1.0, 2.0, 3.0], "std": [4.0, 5.0, 6.5]}
}
)");
  ASSERT_EQ(second.graph.layers.size(), first.graph.layers.size());
  for (std::size_t i = 0; i < first.graph.layers.size(); ++i) {
    EXPECT_EQ(second.graph.layers[i].attributes.values(),
              first.graph.layers[i].attributes.values());
  }
}

TEST(GraphJson, WritesWhateverThePlacesOfFreeSizes) {
  for (const char* const shape : {"[\"N\", 3, \"H\", \"W\"]", "[1, 3, \"H\", 5]",
                                  "[\"N\", \"T\", 7]", "[2, 9, 7]", "[\"N\", 7]"}) {
    const std::string text =
        std::string(
            "{\"leadsman_graph\": 1, \"name\": \"g\", \"inputs\": [{\"name\": \"x\", \"shape\": ") +
        shape + "}], \"outputs\": [\"x\"], \"layers\": []}";
    const Graph graph = parse_graph(text, "graph.json").graph;
    const std::string written = graph_text(graph, std::nullopt);
    EXPECT_NE(written.find(shape), std::string::npos) << written;
    EXPECT_EQ(parse_graph(written, "graph.json").graph.inputs[0].shape, graph.inputs[0].shape);
  }
}

struct BadGraph {
  std::string text;
  std::string message;
};

void expect_refused(const std::vector<BadGraph>& cases) {
  for (const BadGraph& bad : cases) {
    EXPECT_EQ(input_error([&] { parse_graph(bad.text, "graph.json"); }),
              "graph.json: " + bad.message);
  }
}

TEST(BadGraphJson, AtTheTop) {
  expect_refused({
      {"",
       "line 1, column 1: not valid JSON: while parsing value - unexpected end of input; "
       "expected '[', '{', or a literal"},
      {graph_with("\"outputs\": [\"sum\"],", "\"outputs\": [\"sum\"]"),
       "line 6, column 10: not valid JSON: while parsing object - unexpected string literal; "
       "expected '}'"},
      {graph_with("\"scale\": 1", "\"scale\": NaN"),
       "line 18, column 56: not valid JSON: while parsing value - invalid literal; last read: "
       "'\"scale\": N'"},
      {graph_with("\"name\": \"small\"", "\"leadsman_graph\": 1"),
       "/: the key 'leadsman_graph' is given twice"},
      {"[]", "an object is wanted, found a list of 0"},
      {"null", "an object is wanted, found null"},
      {"{}", "the key 'leadsman_graph' is missing: this is not a graph of leadsman's"},
      {"{\"leadsman_graph\": 2, \"what\": 3}",
       "/leadsman_graph: version 2 of the format; this build reads version 1"},
      {"{\"leadsman_graph\": \"1\"}",
       "/leadsman_graph: a version number is wanted, found the text '1'"},
      {"{\"leadsman_graph\": 1.0}",
       "/leadsman_graph: a version number is wanted, found the number 1.0"},
      {"{\"leadsman_graph\": 1}", "the key 'name' is missing"},
      {graph_with("\"outputs\"", "\"output\""),
       "the key 'output' is not known; nearest: 'outputs'"},
      {graph_with("\"outputs\"", "\"zzzzzzzzzzzzz\""),
       "the key 'zzzzzzzzzzzzz' is not known; known: leadsman_graph, name, inputs, outputs, "
       "layers, preprocess"},
      {graph_with("\"name\": \"small\"", "\"name\": 5"),
       "/name: a name is wanted, found the number 5"},
      {graph_with("\"small\"", "\"\""), "/name: a name may not be empty"},
      {graph_with("\"small\"", "\"\\u001b[2J\""), "/name: a control character in '\\x1b[2J'"},
      {graph_with("[\"sum\"]", "\"sum\""),
       "/outputs: a list of names is wanted, found the text 'sum'"},
      {graph_with("[\"sum\"]", "[7]"), "/outputs/0: a name is wanted, found the number 7"},
      {graph_with("[\"sum\"]", "[]"), "/outputs: a graph needs at least one output"},
      {graph_with("[\"sum\"]", "[\"som\"]"),
       "/outputs/0: no layer is called 'som'; nearest: 'sum'"},
      {graph_with("[\"sum\"]", "[\"sum\", \"sum\"]"), "/outputs/1: 'sum' is an output twice"},
      {std::string((4 << 20) + 1, ' '), "holds 4194305 bytes, at most 4194304 are read"},
  });
}

TEST(BadGraphJson, Inputs) {
  const auto shape = [](const char* text) { return graph_with("[\"N\", 3, \"H\", \"W\"]", text); };
  expect_refused({
      {graph_with("[{\"name\": \"image\"", "{\"name\": \"image\""),
       "line 4, column 81: not valid JSON: while parsing object - unexpected ']'; expected '}'"},
      {graph_with("\"name\": \"image\", ", ""), "/inputs/0: the key 'name' is missing"},
      {graph_with("\"usual_size\"", "\"usual_sizes\""),
       "/inputs/0: the key 'usual_sizes' is not known; nearest: 'usual_size'"},
      {shape("[3, \"H\", \"W\"]"),
       "/inputs/0/shape/1: 'H' stands for the height, size 2 of [N, C, H, W]"},
      {shape("[\"W\", 3, \"H\", \"W\"]"),
       "/inputs/0/shape/0: 'W' stands for the width, size 3 of [N, C, H, W]"},
      {shape("[1, \"N\", 4, 4]"), "/inputs/0/shape/1: 'N' stands for the batch, the first size"},
      {shape("[1, 3, \"T\", 4]"),
       "/inputs/0/shape/2: 'T' stands for the tokens, size 1 of [N, T, C]"},
      {shape("[\"B\", 3, 4, 4]"),
       "/inputs/0/shape/0: a size or one of \"N\", \"H\", \"W\", \"T\" is wanted, found the text "
       "'B'"},
      {shape("[-1, 3, 4, 4]"),
       "/inputs/0/shape/0: a size of 1 or more is wanted, found the number -1"},
      {shape("[0, 3, 4, 4]"),
       "/inputs/0/shape/0: a size of 1 or more is wanted, found the number 0"},
      {shape("[1, 3.5, 4, 4]"),
       "/inputs/0/shape/1: a size of 1 or more is wanted, found the number 3.5"},
      {shape("[1, 3, 4, 9999999999]"), "/inputs/0/shape/3: the size 9999999999 is too big"},
      {shape("[1, 3, 4, 99999999999999999999]"),
       "/inputs/0/shape/3: a size of 1 or more is wanted, found the number 1e+20"},
      {shape("[1, 3, 4, 18446744073709551615]"),
       "/inputs/0/shape/3: the number 18446744073709551615 is too big"},
      {shape("[1, 3, [4], 4]"),
       "/inputs/0/shape/2: a size of 1 or more is wanted, found a list of 1"},
      {shape("7"), "/inputs/0/shape: a list of sizes is wanted, found the number 7"},
      {graph_with("[\"N\", 3, \"H\", \"W\"], \"usual_size\": [8, 6]", "[1, 2, 3, 4, 5]"),
       "/inputs/0/shape: has 5 sizes; features have 2, tokens 3, images 4"},
      {shape("[\"N\", \"T\", 5]"),
       "/inputs/0/usual_size: only images [N, C, H, W] have a usual size"},
      {graph_with("[8, 6]", "[8]"),
       "/inputs/0/usual_size: a list [height, width] is wanted, found a list of 1"},
      {graph_with("[8, 6]", "[8, 0]"),
       "/inputs/0/usual_size/1: a size of 1 or more is wanted, found the number 0"},
      {graph_with("[8, 6]", "8"),
       "/inputs/0/usual_size: a list [height, width] is wanted, found the number 8"},
      {graph_with("\"image\"", "\"im:age\""),
       "/inputs/0/name: 'im:age': a name may not contain ':'"},
      {graph_with("\"image\"", "\"\""), "/inputs/0/name: a name may not be empty"},
  });
}

TEST(BadGraphJson, Layers) {
  const auto conv = [](const char* attributes) {
    return graph_with("{\"kernel_size\": 3, \"padding\": [1, 1]}", attributes);
  };
  expect_refused({
      {graph_with("\"operator\": \"add\", ", ""), "/layers/3: the key 'operator' is missing"},
      {graph_with("\"inputs\": [\"conv2\"", "\"input\": [\"conv2\""),
       "/layers/3: the key 'input' is not known; nearest: 'inputs'"},
      {graph_with("\"add\"", "\"ad\""),
       "/layers/3/operator: no operator is called 'ad'; nearest: 'add'"},
      {graph_with("\"add\"", "null"),
       "/layers/3/operator: an operator's name is wanted, found null"},
      {graph_with("[\"conv2\", \"relu1\"]", "[\"conv2\", \"relu\"]"),
       "/layers/3/inputs/1: no layer or input is called 'relu'; nearest: 'relu1'"},
      {graph_with("[\"conv2\", \"relu1\"]", "[\"conv2\", {}]"),
       "/layers/3/inputs/1: a name is wanted, found an object"},
      {graph_with("[\"conv2\", \"relu1\"]", "\"conv2\""),
       "/layers/3/inputs: a list of names is wanted, found the text 'conv2'"},
      {graph_with("[\"conv1\"]", "[\"conv2\"]"),
       "/layers/1/inputs: 'relu1' waits for itself: there is a cycle"},
      {graph_with("{\"name\": \"sum\"", "{\"name\": \"relu1\""),
       "/layers/3/name: 'relu1' is used twice"},
      {graph_with("{\"name\": \"sum\"", "{\"name\": \"a/b~c\\u0007\""),
       "/layers/3/name: a control character in 'a/b~c\\x07'"},
      {conv("[3]"), "/layers/0/attributes: an object is wanted, found a list of 1"},
      {conv("{\"kernel_size\": null}"),
       "/layers/0/attributes/kernel_size: true, false, a number, a word or a list of integers is "
       "wanted, found null"},
      {conv("{\"kernel_size\": [3, 3.5]}"),
       "/layers/0/attributes/kernel_size/1: an integer is wanted, found the number 3.5"},
      {conv("{\"kernel_size\": [3, 99999999999999999999]}"),
       "/layers/0/attributes/kernel_size/1: an integer is wanted, found the number 1e+20"},
      {conv("{\"kernel_size\": 18446744073709551615}"),
       "/layers/0/attributes/kernel_size: the number 18446744073709551615 is too big"},
      {conv("{\"kernel_size\": {\"h\": 3}}"),
       "/layers/0/attributes/kernel_size: true, false, a number, a word or a list of integers is "
       "wanted, found an object"},
      {conv("{\"kernel/size\": [\"3\"]}"),
       "/layers/0/attributes/kernel~1size/0: an integer is wanted, found the text '3'"},
      {conv("{\"kernel_size\": 3, \"strid\": 2}"),
       "/layers/0/attributes: strid: conv2d has no such attribute; nearest: 'stride'"},
      {conv("{\"kernel_size\": \"3\"}"),
       "/layers/0/attributes: kernel_size: is not an integer or [height, width]"},
      {graph_with("{\"weight\": \"conv1.weight\"}", "{\"weight\": 1}"),
       "/layers/0/weights/weight: a tensor's name is wanted, found the number 1"},
      {graph_with("{\"weight\": \"conv1.weight\"}", "{\"weight\": \"\"}"),
       "/layers/0/weights/weight: a tensor's name may not be empty"},
      {graph_with("{\"weight\": \"conv1.weight\"}", "[]"),
       "/layers/0/weights: an object is wanted, found a list of 0"},
      {graph_with("\"bias\": \"conv2", "\"bais\": \"conv2"),
       "/layers/2/weights/bais: conv2d has no weight 'bais'; nearest: 'bias'"},
  });
}

TEST(BadGraphJson, Preprocess) {
  expect_refused({
      {graph_with("\"channels\"", "\"channel\""),
       "/preprocess: the key 'channel' is not known; nearest: 'channels'"},
      {graph_with("\"BGR\"", "\"RGBA\""),
       "/preprocess/channels: 'RGBA' is not known; nearest: 'RGB'"},
      {graph_with("\"BGR\"", "\"YCbCr\""),
       "/preprocess/channels: 'YCbCr' is not known; known: RGB, BGR, GREY"},
      {graph_with("\"BGR\"", "3"),
       "/preprocess/channels: a channel order is wanted, found the number 3"},
      {graph_with("\"exif\"", "\"exfi\""),
       "/preprocess/orientation: 'exfi' is not known; nearest: 'exif'"},
      {graph_with("\"bicubic\"", "\"cubic\""),
       "/preprocess/resize/interpolation: 'cubic' is not known; nearest: 'bicubic'"},
      {graph_with("\"shorter_side\": 10", "\"shorter_side\": 10, \"exact\": [1, 2]"),
       "/preprocess/resize: either 'shorter_side' or 'exact' is wanted"},
      {graph_with("\"shorter_side\": 10, ", ""),
       "/preprocess/resize: either 'shorter_side' or 'exact' is wanted"},
      {graph_with("\"shorter_side\": 10", "\"shorter_side\": 0"),
       "/preprocess/resize/shorter_side: a size of 1 or more is wanted, found the number 0"},
      {graph_with("\"shorter_side\": 10", "\"exact\": [1, 2, 3]"),
       "/preprocess/resize/exact: a list [height, width] is wanted, found a list of 3"},
      {graph_with("\"crop\": [8, 6]", "\"crop\": [8, \"6\"]"),
       "/preprocess/crop/1: a width of 1 or more is wanted, found the text '6'"},
      {graph_with("\"crop\": [8, 6]", "\"crop\": [8, 99999]"),
       "/preprocess: crop is [8, 99999], wants sizes in 1..32768"},
      {graph_with("\"scale\": 1", "\"scale\": \"1/255\""),
       "/preprocess/scale: a number is wanted, found the text '1/255'"},
      {graph_with("[1, 2, 3]", "[1, 2]"), "/preprocess: mean has 2 values for 3 channels"},
      {graph_with("[1, 2, 3]", "[1, null, 3]"),
       "/preprocess/mean/1: a number is wanted, found null"},
      {graph_with("[1, 2, 3]", "[]"),
       "/preprocess/mean: a list with a number for each channel is wanted, found a list of 0"},
      {graph_with("[4, 5, 6.5]", "[4, 0, 6.5]"), "/preprocess/std: number 1 is not above 0"},
      {graph_with("[4, 5, 6.5]", "4"),
       "/preprocess/std: a list with a number for each channel is wanted, found the number 4"},
  });
}

}  // namespace
}  // namespace leadsman
