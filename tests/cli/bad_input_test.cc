// Every kind of file, broken in every way we could think of, given to the tool as a user would:
// the documented exit code, a message that names the file, no answer and no output file.
#include <functional>
#include <limits>

#include <gtest/gtest.h>

#include "leadsman/bundle.h"
#include "leadsman/tensor_file.h"
#include "tests/cli/tool.h"
#include "tests/support/graph_builder.h"

namespace leadsman {
namespace {

using testing::read_file;
using testing::run_tool;
using testing::ScratchFolder;
using testing::ToolResult;
using testing::write_file;

// A folder with a good model, a good picture, a good reference and a good tensor.
class Scene {
 public:
  Scene() {
    testing::GraphBuilder net = testing::small_conv_net();
    Bundle bundle;
    bundle.graph = net.graph();
    check_graph(bundle.graph);
    bundle.weights = net.weights();
    for (int i = 0; i < 10; ++i) bundle.labels.push_back("kind " + std::to_string(i));
    bundle.preprocess = Preprocess{};
    bundle.preprocess->exact = PictureSize{24, 20};
    save_bundle(bundle, folder / "model");
    save_bundle(bundle, folder / "model.safetensors");
    write_png(folder / "picture.png", Picture{30, 20, std::vector<std::uint8_t>(1800, 90)});
    write_tensors(folder / "input.npy", {{"input", Tensor({1, 3, 24, 20})}});
    write_tensors(folder / "reference.safetensors",
                  {{"image", Tensor({1, 3, 24, 20})}, {"head", Tensor({1, 10})}});
  }
  std::string graph() const { return read_file(folder / "model/graph.json"); }
  void graph(const std::string& text) const { write_file(folder / "model/graph.json", text); }
  /// Replaces the first `from` in a file; a test that replaces nothing tests nothing.
  void edit(const std::string& file, const std::string& from, const std::string& to) const {
    std::string text = read_file(folder / file);
    const std::size_t at = text.find(from);
    ASSERT_NE(at, std::string::npos) << from;
    write_file(folder / file, text.replace(at, from.size(), to));
  }
  void truncate(const std::string& file, double share) const {
    const std::string bytes = read_file(folder / file);
    write_file(
        folder / file,
        bytes.substr(0, static_cast<std::size_t>(share * static_cast<double>(bytes.size()))));
  }
  void weight(const std::string& name, const Tensor& tensor) const {
    NamedTensors tensors;
    const TensorFile file = TensorFile::open(folder / "model/weights.safetensors");
    for (const std::string& each : file.names()) {
      tensors.emplace_back(each, each == name ? tensor : file.read(each));
    }
    write_tensors(folder / "model/weights.safetensors", tensors);
  }

  ScratchFolder folder;
};

// A .safetensors file with this header and `data` bytes behind it.
std::string with_header(const std::string& header, std::size_t data) {
  std::string bytes(8, '\0');
  for (int i = 0; i < 8; ++i) {
    bytes[static_cast<std::size_t>(i)] = static_cast<char>(header.size() >> (8 * i) & 255);
  }
  return bytes + header + std::string(data, '\0');
}

struct BadInput {
  const char* what;
  const char* command;  ///< words by spaces; @ stands for the scene's folder
  std::function<void(const Scene&)> spoil;
  int exit_code;
  const char* message;
};

const auto kNothing = [](const Scene&) {};
constexpr const char* kClassify = "classify @/model @/picture.png";
constexpr const char* kDescribe = "describe @/model";
constexpr const char* kDescribeFile = "describe @/model.safetensors";
constexpr const char* kVerify = "verify @/model --reference @/reference.safetensors";
constexpr const char* kTensor = "classify @/model --tensor @/input.npy";

void put(const Scene& scene, const char* file, const std::string& bytes) {
  write_file(scene.folder / file, bytes);
}

Tensor with_value(const Shape& shape, float value) {
  Tensor tensor(shape);
  tensor.mutable_data()[1] = value;
  return tensor;
}

const BadInput kBundles[] = {
    {"no such bundle", "describe @/nowhere", kNothing, 3, "nowhere: no such"},
    {"a bundle that is a text file", "describe @/model/labels.txt", kNothing, 3, "labels.txt"},
    {"an empty folder", "describe @/empty",
     [](const Scene& s) { std::filesystem::create_directory(s.folder / "empty"); }, 3,
     "graph.json"},
    {"no graph", kDescribe,
     [](const Scene& s) { std::filesystem::remove(s.folder / "model/graph.json"); }, 3,
     "graph.json"},
    {"an empty graph", kDescribe, [](const Scene& s) { s.graph(""); }, 3, "graph.json"},
    {"a truncated graph", kDescribe, [](const Scene& s) { s.truncate("model/graph.json", 0.5); }, 3,
     "graph.json: line"},
    {"a graph that is a list", kDescribe, [](const Scene& s) { s.graph("[1, 2]"); }, 3,
     "graph.json"},
    {"brackets without end", kDescribe, [](const Scene& s) { s.graph(std::string(1 << 20, '[')); },
     3, "graph.json"},
    {"a graph of another version", kDescribe,
     [](const Scene& s) {
       s.edit("model/graph.json", "\"leadsman_graph\": 1", "\"leadsman_graph\": 9");
     },
     3, "/leadsman_graph"},
    {"an unknown key", kDescribe,
     [](const Scene& s) { s.edit("model/graph.json", "\"outputs\"", "\"output\""); }, 3,
     "nearest: 'outputs'"},
    {"a name that nobody has", kDescribe,
     [](const Scene& s) { s.edit("model/graph.json", "[\"stem.bn\"]", "[\"stem.bm\"]"); }, 3,
     "graph.json: /layers/2/inputs/0: no layer or input is called 'stem.bm'; nearest: 'stem.bn'"},
    {"a cycle", kDescribe,
     [](const Scene& s) { s.edit("model/graph.json", "[\"image\"]", "[\"head\"]"); }, 3, "cycle"},
    {"two layers of one name", kDescribe,
     [](const Scene& s) {
       s.edit("model/graph.json", "\"name\": \"stem.relu\"", "\"name\": \"stem.bn\"");
     },
     3, "'stem.bn' is used twice"},
    {"an unknown operator", kDescribe,
     [](const Scene& s) { s.edit("model/graph.json", "\"max_pool\"", "\"max_poll\""); }, 3,
     "nearest: 'max_pool'"},
    {"an unknown attribute", kDescribe,
     [](const Scene& s) { s.edit("model/graph.json", "\"stride\"", "\"strife\""); }, 3,
     "nearest: 'stride'"},
    {"a stride of 2^62", kDescribe,
     [](const Scene& s) {
       s.edit("model/graph.json", "\"stride\": [", "\"stride\": [4611686018427387904], \"x\": [");
     },
     3, "graph.json: /layers/"},
    {"a window larger than the image", "describe @/model --size 1x1",
     [](const Scene& s) {
       s.edit("model/graph.json", "\"padding\": [1, 1, 1, 1]", "\"padding\": [0, 0, 0, 0]");
     },
     3, "does not fit"},
    {"an input of 2^62 channels", kDescribe,
     [](const Scene& s) {
       s.edit("model/graph.json", "[\"N\", 3,", "[\"N\", 4611686018427387904,");
     },
     3, "/inputs/0/shape/1: the size 4611686018427387904"},
    {"a negative size", kDescribe,
     [](const Scene& s) { s.edit("model/graph.json", "[\"N\", 3,", "[\"N\", -3,"); }, 3,
     "/inputs/0/shape"},
    {"channels that do not meet the weights", kDescribe,
     [](const Scene& s) { s.edit("model/graph.json", "[\"N\", 3,", "[\"N\", 4,"); }, 3,
     "layer 'stem.conv' (conv2d): weight has shape [16, 3, 3, 3], expected [16, 4, 3, 3]"},
    {"not UTF-8", kDescribe,
     [](const Scene& s) { s.edit("model/graph.json", "\"small\"", "\"\xff\xfe\""); }, 3,
     "graph.json"},
    {"a preprocess that contradicts itself", kClassify,
     [](const Scene& s) {
       s.edit("model/graph.json", "\"exact\": [24, 20]", "\"exact\": [0, 20]");
     },
     3, "/preprocess"},
    {"no preprocess, yet a picture", kClassify,
     [](const Scene& s) {
       const std::string text = s.graph();
       s.graph(text.substr(0, text.rfind(",\n  \"preprocess\"")) + "\n}\n");
     },
     3, "preprocess"},
};

const BadInput kWeights[] = {
    {"no weights", kDescribe,
     [](const Scene& s) { std::filesystem::remove(s.folder / "model/weights.safetensors"); }, 3,
     "weights.safetensors"},
    {"empty weights", kDescribe, [](const Scene& s) { put(s, "model/weights.safetensors", ""); }, 3,
     "weights.safetensors"},
    {"truncated weights", kDescribe,
     [](const Scene& s) { s.truncate("model/weights.safetensors", 0.9); }, 3,
     "weights.safetensors"},
    {"a truncated header", kDescribe,
     [](const Scene& s) { s.truncate("model/weights.safetensors", 0.01); }, 3,
     "weights.safetensors"},
    {"another format's magic", kDescribe,
     [](const Scene& s) { put(s, "model/weights.safetensors", "GIF89a, and more of that"); }, 3,
     "weights.safetensors"},
    {"a header of 2^62 bytes", kDescribe,
     [](const Scene& s) {
       put(s, "model/weights.safetensors", std::string("\0\0\0\0\0\0\0\x40{}", 10));
     },
     3, "weights.safetensors"},
    {"weights that are a folder", kDescribe,
     [](const Scene& s) {
       std::filesystem::remove(s.folder / "model/weights.safetensors");
       std::filesystem::create_directory(s.folder / "model/weights.safetensors");
     },
     3, "weights.safetensors"},
    {"a missing tensor", kDescribe,
     [](const Scene& s) { s.edit("model/graph.json", "\"head.weight\"", "\"head.wieght\""); }, 3,
     "nearest: 'head.weight'"},
    {"a tensor of another shape", kDescribe,
     [](const Scene& s) {
       s.weight("head.weight", Tensor({10, 31}));
     },
     3, "layer 'head' (linear): weight has shape [10, 31], expected [10, 32]"},
    {"a zero-sized tensor", kDescribe,
     [](const Scene& s) {
       s.weight("head.weight", Tensor({0, 32}));
     },
     3, "head.weight"},
    {"NaN among the weights", kClassify,
     [](const Scene& s) {
       s.weight("head.weight", with_value({10, 32}, std::numeric_limits<float>::quiet_NaN()));
     },
     3, "'head.weight'"},
    {"infinity among the weights", kClassify,
     [](const Scene& s) {
       s.weight("head.bias", with_value({10}, std::numeric_limits<float>::infinity()));
     },
     3, "'head.bias'"},
    {"offsets beyond the file", kDescribe,
     [](const Scene& s) {
       put(s, "model/weights.safetensors",
           with_header(R"({"a":{"dtype":"F32","shape":[2],"data_offsets":[0,8]}})", 4));
     },
     3, "'a'"},
    {"a shape of 2^62", kDescribe,
     [](const Scene& s) {
       put(s, "model/weights.safetensors",
           with_header(
               R"({"a":{"dtype":"F32","shape":[4611686018427387904,4],"data_offsets":[0,0]}})", 0));
     },
     3, "'a'"},
    {"overlapping tensors", kDescribe,
     [](const Scene& s) {
       put(s, "model/weights.safetensors",
           with_header(R"({"a":{"dtype":"F32","shape":[2],"data_offsets":[0,8]},)"
                       R"("b":{"dtype":"F32","shape":[2],"data_offsets":[4,12]}})",
                       12));
     },
     3, "weights.safetensors"},
    {"an unknown element type", kDescribe,
     [](const Scene& s) {
       put(s, "model/weights.safetensors",
           with_header(R"({"a":{"dtype":"F31","shape":[1],"data_offsets":[0,4]}})", 4));
     },
     3, "F31"},
    {"a single file without a graph", kDescribeFile,
     [](const Scene& s) {
       put(s, "model.safetensors",
           with_header(R"({"a":{"dtype":"F32","shape":[1],"data_offsets":[0,4]}})", 4));
     },
     3, "leadsman_graph"},
    {"a truncated single file", kDescribeFile,
     [](const Scene& s) { s.truncate("model.safetensors", 0.7); }, 3, "model.safetensors"},
};

const BadInput kPictures[] = {
    {"no such picture", "classify @/model @/nowhere.png", kNothing, 3, "nowhere.png: no such"},
    {"an empty picture", kClassify, [](const Scene& s) { put(s, "picture.png", ""); }, 3,
     "picture.png"},
    {"a truncated picture", kClassify, [](const Scene& s) { s.truncate("picture.png", 0.6); }, 3,
     "picture.png"},
    {"a picture of another format", kClassify,
     [](const Scene& s) { put(s, "picture.png", "GIF89a\x01\x00\x01\x00"); }, 3,
     "not JPEG, PNG, BMP or PNM"},
    {"a picture of 65535 x 65535", kClassify,
     [](const Scene& s) { put(s, "picture.png", "P6 65535 65535 255\n"); }, 3, "picture.png"},
    {"a picture of 0 x 0", kClassify, [](const Scene& s) { put(s, "picture.png", "P6 0 0 255\n"); },
     3, "picture.png"},
    {"a folder without pictures", "classify @/model @/model", kNothing, 3,
     "holds no JPEG, PNG, BMP or PNM"},
    {"an empty list", "classify @/model -", kNothing, 3, "names no picture"},
    {"a picture that is a folder", "tap @/model @/model --layers head --out @/out.npz", kNothing, 3,
     "model"},
};

const BadInput kOthers[] = {
    {"too few labels", kClassify, [](const Scene& s) { put(s, "model/labels.txt", "one\ntwo\n"); },
     3, "2 labels for 10 classes"},
    {"labels that are not UTF-8", kClassify,
     [](const Scene& s) { put(s, "model/labels.txt", "one\n\xff\xff\n"); }, 3, "labels.txt"},
    {"a blank label", kClassify, [](const Scene& s) { put(s, "model/labels.txt", "one\n\ntwo\n"); },
     3, "labels.txt"},
    {"no reference", "verify @/model", kNothing, 2, "--reference"},
    {"no such reference", "verify @/model --reference @/none.safetensors", kNothing, 3,
     "none.safetensors"},
    {"a truncated reference", kVerify,
     [](const Scene& s) { s.truncate("reference.safetensors", 0.8); }, 3, "reference.safetensors"},
    {"a reference without the input", kVerify,
     [](const Scene& s) {
       write_tensors(s.folder / "reference.safetensors", {{"head", Tensor({1, 10})}});
     },
     3, "no tensor 'image'"},
    {"a reference without a layer", kVerify,
     [](const Scene& s) {
       write_tensors(s.folder / "reference.safetensors", {{"image", Tensor({1, 3, 24, 20})}});
     },
     3, "none of the graph's layers"},
    {"a reference of another input", kVerify,
     [](const Scene& s) {
       write_tensors(s.folder / "reference.safetensors",
                     {{"image", Tensor({1, 4, 24, 20})}, {"head", Tensor({1, 10})}});
     },
     3, "reference.safetensors"},
    {"no such tensor file", "classify @/model --tensor @/none.npy", kNothing, 3, "none.npy"},
    {"a truncated tensor", kTensor, [](const Scene& s) { s.truncate("input.npy", 0.5); }, 3,
     "input.npy"},
    {"a tensor of another magic", kTensor,
     [](const Scene& s) { put(s, "input.npy", "P6 1 1 255\nabc"); }, 3, "input.npy"},
    {"a tensor of 2^62 values", kTensor,
     [](const Scene& s) { s.edit("input.npy", "(1, 3, 24, 20)", "(4611686018427387904,)"); }, 3,
     "input.npy"},
    {"a tensor of another shape", kTensor,
     [](const Scene& s) {
       write_tensors(s.folder / "input.npy", {{"x", Tensor({1, 2, 24, 20})}});
     },
     2, "cannot have shape [1, 2, 24, 20]"},
    {"a tensor of no rows", kTensor,
     [](const Scene& s) {
       write_tensors(s.folder / "input.npy", {{"x", Tensor({0, 3, 24, 20})}});
     },
     2, "cannot have shape"},
    {"NaN in the input", kTensor,
     [](const Scene& s) {
       write_tensors(s.folder / "input.npy",
                     {{"x", with_value({1, 3, 24, 20}, std::numeric_limits<float>::quiet_NaN())}});
     },
     3, "not finite"},
    {"an output in no folder", "tap @/model @/picture.png --layers head --out @/none/out.npz",
     kNothing, 3, "none/out.npz"},
    {"an output of no known format", "tap @/model @/picture.png --layers head --out @/out.txt",
     kNothing, 2, "out.txt"},
    {"sheets where a file is", "tap @/model @/picture.png --layers head --sheets @/input.npy",
     kNothing, 3, "input.npy"},
    {"a layer that is not there", "tap @/model @/picture.png --layers haed --out @/out.npz",
     kNothing, 2, "nearest: 'head'"},
    {"heads of a model without attention", "tap @/model @/picture.png --heads @/out.npz", kNothing,
     2, "no layer matches '*:weights'"},
};

const BadInput kArguments[] = {
    {"no such command", "describ @/model", kNothing, 2, "describ"},
    {"no bundle", "describe", kNothing, 2, "BUNDLE is required"},
    {"an unknown option", "describe @/model --jason", kNothing, 2, "--jason"},
    {"a size of words", "describe @/model --size large", kNothing, 2, "--size: 'large'"},
    {"a size of zero", "describe @/model --size 0x20", kNothing, 2, "--size: '0x20'"},
    {"a size without end", "describe @/model --size 99999999999999999999x1", kNothing, 2, "--size"},
    {"threads below one", "describe @/model --threads -2", kNothing, 2, "--threads: -2"},
    {"threads that are no number", "describe @/model --threads two", kNothing, 2, "two"},
    {"no labels wanted", "classify @/model @/picture.png --top 0", kNothing, 2, "--top"},
    {"a mode that is none", "verify @/model --mode both", kNothing, 2, "both"},
    {"a picture and a tensor", "classify @/model @/picture.png --tensor @/input.npy", kNothing, 2,
     "not both"},
    {"neither", "tap @/model --layers head --out @/out.npz", kNothing, 2, "one picture or"},
    {"tap to nowhere", "tap @/model @/picture.png --layers head", kNothing, 2, "say where to"},
};

void expect_refused(std::span<const BadInput> cases) {
  for (const BadInput& bad : cases) {
    SCOPED_TRACE(bad.what);
    const Scene scene;
    bad.spoil(scene);
    std::vector<std::string> arguments;
    std::string word;
    for (const char c : std::string(bad.command) + " ") {
      if (c == '@') {
        word += scene.folder.path();
      } else if (c == ' ') {
        arguments.push_back(std::exchange(word, {}));
      } else {
        word += c;
      }
    }
    const ToolResult result = run_tool(arguments);
    EXPECT_EQ(result.exit_code, bad.exit_code) << result.err;
    EXPECT_NE(result.err.find(bad.message), std::string::npos) << result.err;
    EXPECT_EQ(result.err.rfind("leadsman: ", 0), 0U) << result.err;
    EXPECT_EQ(result.out, "");
    EXPECT_FALSE(std::filesystem::exists(scene.folder / "out.npz"));
    EXPECT_FALSE(std::filesystem::exists(scene.folder / "out.txt"));
  }
}

TEST(BadInput, TheSceneItselfIsGood) {
  const Scene scene;
  for (const std::string& model : {scene.folder / "model", scene.folder / "model.safetensors"}) {
    const ToolResult result = run_tool({"classify", model, scene.folder / "picture.png"});
    EXPECT_EQ(result.exit_code, 0) << result.err;
    EXPECT_NE(result.out.find("kind "), std::string::npos);
  }
  EXPECT_EQ(run_tool({"classify", scene.folder / "model", "--tensor", scene.folder / "input.npy"})
                .exit_code,
            0);
}

TEST(BadInput, Bundles) {
  expect_refused(kBundles);
}
TEST(BadInput, Weights) {
  expect_refused(kWeights);
}
TEST(BadInput, Pictures) {
  expect_refused(kPictures);
}
TEST(BadInput, LabelsReferencesTensorsAndOutputs) {
  expect_refused(kOthers);
}
TEST(BadInput, Arguments) {
  expect_refused(kArguments);
}

TEST(BadInput, ThereAreAtLeastSixtyCases) {
  EXPECT_GE(std::size(kBundles) + std::size(kWeights) + std::size(kPictures) + std::size(kOthers),
            60U);
}

}  // namespace
}  // namespace leadsman
