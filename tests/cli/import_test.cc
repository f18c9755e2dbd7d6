// The import command: what it writes, and every wrong checkpoint and argument given as a user
// would give it.
#include <functional>
#include <limits>

#include <gtest/gtest.h>
#include <nlohmann/json.hpp>

#include "leadsman/architectures.h"
#include "leadsman/bundle.h"
#include "leadsman/tensor_file.h"
#include "tests/cli/tool.h"

namespace leadsman {
namespace {

using nlohmann::json;
using testing::read_file;
using testing::run_tool;
using testing::ScratchFolder;
using testing::ToolResult;
using testing::write_file;

// A folder with a good checkpoint, w.safetensors of mobilenet_v2 with 4 classes.
class Scene {
 public:
  Scene() {
    const Architecture built = build_architecture("mobilenet_v2", {.classes = 4});
    const WeightMap weights = seeded_weights(built, 1);
    tensors.assign(weights.begin(), weights.end());
    write();
    write_file(folder / "labels.txt", "a\nb\nc\nd\n");
  }
  void write() const { write_tensors(folder / "w.safetensors", tensors); }
  Tensor& at(const std::string& name) {
    for (auto& [each, tensor] : tensors) {
      if (each == name) return tensor;
    }
    throw std::runtime_error("no tensor " + name);
  }

  ScratchFolder folder;
  NamedTensors tensors;
};

/// Words by spaces; @ stands for the folder.
std::vector<std::string> words(const std::string& command, const ScratchFolder& folder) {
  std::vector<std::string> arguments;
  std::string word;
  for (const char c : command + " ") {
    if (c == '@') {
      word += folder.path();
    } else if (c == ' ') {
      arguments.push_back(std::exchange(word, {}));
    } else {
      word += c;
    }
  }
  return arguments;
}

constexpr const char* kImport =
    "import --architecture mobilenet_v2 @/w.safetensors --labels @/labels.txt --out @/out";

TEST(Import, MakesABundleOfACheckpoint) {
  const Scene scene;
  const ToolResult result = run_tool(words(kImport, scene.folder));
  ASSERT_EQ(result.exit_code, 0) << result.err;
  EXPECT_NE(result.out.find("2,228,996"), std::string::npos)
      << result.out;  // 3,504,872 less 996 * 1281
  const Bundle bundle = load_bundle(scene.folder / "out");
  EXPECT_EQ(bundle.graph.name, "mobilenet_v2");
  EXPECT_EQ(bundle.labels, (std::vector<std::string>{"a", "b", "c", "d"}));
  EXPECT_EQ(bundle.preprocess->shorter_side, 256);
  EXPECT_EQ(bundle.weights.size(), scene.tensors.size());
}

TEST(Import, MakesASingleFileToo) {
  const Scene scene;
  const ToolResult result = run_tool(
      words("import --architecture mobilenet_v2 @/w.safetensors --out @/out.safetensors --json",
            scene.folder));
  ASSERT_EQ(result.exit_code, 0) << result.err;
  const json document = json::parse(result.out);
  EXPECT_EQ(document.at("classes"), 4);
  EXPECT_EQ(document.at("labels"), 0);
  EXPECT_EQ(document.at("size"), json({224, 224}));
  EXPECT_EQ(document.at("parameters"), 2'228'996);
  EXPECT_EQ(load_bundle(scene.folder / "out.safetensors").graph.name, "mobilenet_v2");
}

TEST(Import, MakesUntrainedWeightsOfASeed) {
  const ScratchFolder folder;
  for (const std::string name : {"a", "b", "c"}) {
    const ToolResult result =
        run_tool(words("import --architecture vit_ti_32 --size 96x64 --classes 3"
                       " --out @/" +
                           name + " --seed " + (name == "c" ? "2" : "1"),
                       folder));
    ASSERT_EQ(result.exit_code, 0) << result.err;
    EXPECT_NE(result.out.find("untrained"), std::string::npos);
    EXPECT_NE(result.out.find("1x3x96x64"), std::string::npos);
  }
  const auto weights = [&](const char* name) {
    return read_file(folder / std::string(name) + "/weights.safetensors");
  };
  EXPECT_TRUE(weights("a") == weights("b"));
  EXPECT_FALSE(weights("a") == weights("c"));
  const json described = json::parse(run_tool({"describe", folder / "a", "--json"}).out);
  EXPECT_EQ(described.at("inputs").at("image"), json({1, 3, 96, 64}));
}

TEST(Import, TakesTheNumberOfClassesFromTheLabels) {
  const Scene scene;
  const ToolResult result =
      run_tool(words("import --architecture resnet18 --seed 0 --labels @/labels.txt --json "
                     "--out @/out",
                     scene.folder));
  ASSERT_EQ(result.exit_code, 0) << result.err;
  EXPECT_EQ(json::parse(result.out).at("classes"), 4);
}

TEST(Import, ListsTheArchitectures) {
  const ToolResult table = run_tool({"import", "--list"}, "", "COLUMNS=40");
  ASSERT_EQ(table.exit_code, 0) << table.err;
  const ToolResult list = run_tool({"import", "--list", "--json"});
  ASSERT_EQ(list.exit_code, 0) << list.err;
  std::vector<std::string> names;
  for (const json& entry : json::parse(list.out)) {
    names.push_back(entry.at("architecture"));
    EXPECT_NE(table.out.find("\n" + names.back() + " "), std::string::npos) << names.back();
    EXPECT_GT(entry.at("macs"), entry.at("parameters"));
  }
  EXPECT_EQ(names, architecture_names());
  std::istringstream lines(table.out);
  for (std::string line; std::getline(lines, line);) EXPECT_LE(line.size(), 50U) << line;
}

struct BadImport {
  const char* what;
  const char* command;
  std::function<void(Scene&)> spoil;
  int exit_code;
  const char* message;
};

const auto kNothing = [](Scene&) {};

const BadImport kCheckpoints[] = {
    {"no such file", "import --architecture mobilenet_v2 @/none.safetensors --out @/out", kNothing,
     3, "none.safetensors: no such"},
    {"a folder", "import --architecture mobilenet_v2 @ --out @/out", kNothing, 3, "is a folder"},
    {"an empty file", kImport, [](Scene& s) { write_file(s.folder / "w.safetensors", ""); }, 3,
     "w.safetensors: is empty"},
    {"a text", kImport, [](Scene& s) { write_file(s.folder / "w.safetensors", "no tensors"); }, 3,
     "w.safetensors"},
    {"a truncated file", kImport,
     [](Scene& s) {
       const std::string bytes = read_file(s.folder / "w.safetensors");
       write_file(s.folder / "w.safetensors", bytes.substr(0, bytes.size() / 2));
     },
     3, "w.safetensors"},
    {"a pickle", "import --architecture mobilenet_v2 @/w.pth --out @/out",
     [](Scene& s) { write_file(s.folder / "w.pth", "\x80\x02\x8a\x0al\xfc\x9c"); }, 3,
     "save their tensors as .safetensors"},
    {"no tensors", kImport, [](Scene& s) { write_tensors(s.folder / "w.safetensors", {}); }, 3,
     "missing: 'classifier.1.bias'"},
    {"another architecture", "import --architecture efficientnet_b0 @/w.safetensors --out @/out",
     kNothing, 3,
     "these are not the weights of efficientnet_b0:\n  missing: 'features.1.0.block.0.0.weight'"},
    {"another architecture, named", "import --architecture vit_b_16 @/w.safetensors --out @/out",
     kNothing, 3, "\n(they are those of mobilenet_v2 for 4 classes)"},
    {"a tensor less", kImport,
     [](Scene& s) {
       std::erase_if(s.tensors,
                     [](const auto& t) { return t.first == "features.18.1.running_var"; });
       s.write();
     },
     3, "not the weights of mobilenet_v2:\n  missing: 'features.18.1.running_var'\n"},
    {"a tensor more", kImport,
     [](Scene& s) {
       s.tensors.emplace_back("features.0.0.bias", Tensor({32}));
       s.write();
     },
     3, "not the weights of mobilenet_v2:\n  not known: 'features.0.0.bias'\n"},
    {"a name misspelt", kImport,
     [](Scene& s) {
       for (auto& [name, tensor] : s.tensors) {
         if (name == "features.2.conv.2.weight") name = "features.2.conv.2.weigth";
       }
       s.write();
     },
     3,
     "missing: 'features.2.conv.2.weight'; nearest: 'features.2.conv.2.weigth'\n  not known: "
     "'features.2.conv.2.weigth'; nearest: 'features.2.conv.2.weight'\n"},
    {"a tensor misshapen", kImport,
     [](Scene& s) {
       s.at("features.3.conv.1.0.weight") = Tensor({144, 1, 3, 1});
       s.write();
     },
     3, "shape: 'features.3.conv.1.0.weight' is [144, 1, 3, 1], expected [144, 1, 3, 3]"},
    {"a last layer of rank 1", kImport,
     [](Scene& s) {
       s.at("classifier.1.weight") = Tensor({1280});
       s.write();
     },
     3, "shape: 'classifier.1.weight' is [1280], expected [1000, 1280]"},
    {"a last layer that holds nothing", kImport,
     [](Scene& s) {
       s.at("classifier.1.weight") = Tensor({0, 1280});
       s.write();
     },
     3, "shape: 'classifier.1.weight' is [0, 1280]"},
    {"a tensor of integers", kImport,
     [](Scene& s) {
       std::string bytes = read_file(s.folder / "w.safetensors");
       const std::size_t at = bytes.find("\"dtype\":\"F32\"", bytes.find("\"classifier.1.bias\""));
       write_file(s.folder / "w.safetensors", bytes.replace(at, 13, "\"dtype\":\"I32\""));
     },
     3, "type: 'classifier.1.bias' is I32, expected F32, F16, BF16 or F64"},
    {"NaN", kImport,
     [](Scene& s) {
       s.at("features.9.conv.3.bias").mutable_data()[7] = std::numeric_limits<float>::quiet_NaN();
       s.write();
     },
     3, "w.safetensors: tensor 'features.9.conv.3.bias': the element at [7] is NaN"},
    {"positions of no square", "import --architecture vit_ti_32 @/v.safetensors --out @/out",
     [](Scene& s) {
       WeightMap weights = seeded_weights(build_architecture("vit_ti_32"), 1);
       weights.at("encoder.pos_embedding") = Tensor({1, 49, 192});
       write_tensors(s.folder / "v.safetensors", {weights.begin(), weights.end()});
     },
     3, "shape: 'encoder.pos_embedding' is [1, 49, 192], expected [1, 50, 192]"},
    {"another number of classes",
     "import --architecture mobilenet_v2 @/w.safetensors --classes 10 --out @/out", kNothing, 3,
     "shape: 'classifier.1.bias' is [4], expected [10]"},
    {"too few labels", kImport, [](Scene& s) { write_file(s.folder / "labels.txt", "a\n"); }, 3,
     "labels.txt: 1 labels for 4 classes"},
    {"no labels in the file", kImport, [](Scene& s) { write_file(s.folder / "labels.txt", ""); }, 3,
     "labels.txt: 0 labels for 4 classes"},
    {"labels that are not UTF-8", kImport,
     [](Scene& s) { write_file(s.folder / "labels.txt", "a\n\xff\n"); }, 3, "labels.txt: line 2"},
    {"no such labels", kImport, [](Scene& s) { std::filesystem::remove(s.folder / "labels.txt"); },
     3, "labels.txt: no such"},
    {"a folder above that is not there",
     "import --architecture mobilenet_v2 @/w.safetensors --out @/none/out", kNothing, 3,
     "none/out"},
};

const BadImport kArguments[] = {
    {"nothing", "import", kNothing, 2, "--architecture NAME (--list shows them)"},
    {"no architecture", "import @/w.safetensors --out @/out", kNothing, 2, "--architecture"},
    {"no such architecture", "import --architecture resnet19 @/w.safetensors --out @/out", kNothing,
     2, "no architecture is called 'resnet19'; nearest: 'resnet18'"},
    {"no weights", "import --architecture resnet18 --out @/out", kNothing, 2, "--seed N"},
    {"a checkpoint and a seed",
     "import --architecture mobilenet_v2 @/w.safetensors --seed 1 --out @/out", kNothing, 2,
     "not both"},
    {"no place to write", "import --architecture mobilenet_v2 @/w.safetensors", kNothing, 2,
     "--out"},
    {"a seed of letters", "import --architecture resnet18 --seed one --out @/out", kNothing, 2,
     "--seed: 'one' is no number"},
    {"a seed below zero", "import --architecture resnet18 --seed -1 --out @/out", kNothing, 2,
     "--seed: '-1' is no number"},
    {"a seed of more than 64 bits",
     "import --architecture resnet18 --seed 18446744073709551616 --out @/out", kNothing, 2,
     "--seed: '18446744073709551616' is no number"},
    {"no classes", "import --architecture resnet18 --seed 1 --classes 0 --out @/out", kNothing, 2,
     "the number of classes, 0,"},
    {"too many classes", "import --architecture resnet18 --seed 1 --classes 9999999999 --out @/out",
     kNothing, 2, "9999999999"},
    {"no classes of a checkpoint",
     "import --architecture mobilenet_v2 @/w.safetensors --classes 0 --out @/out", kNothing, 2,
     "the number of classes, 0,"},
    {"a size of words", "import --architecture resnet18 --seed 1 --size big --out @/out", kNothing,
     2, "--size: 'big'"},
    {"a size below one patch", "import --architecture vit_b_32 --seed 1 --size 16 --out @/out",
     kNothing, 2, "vit_b_32 cannot take images of 16x16"},
    {"labels and another number of classes",
     "import --architecture resnet18 --seed 1 --classes 5 --labels @/labels.txt --out @/out",
     kNothing, 3, "4 labels for 5 classes"},
    {"nothing to ignore", "import --architecture resnet18 --seed 1 --ignore x --out @/out",
     kNothing, 2, "--ignore wants a checkpoint"},
    {"a pattern that matches nothing",
     "import --architecture mobilenet_v2 @/w.safetensors --ignore aux* --out @/out", kNothing, 2,
     "'aux*' matches no tensor"},
    {"the checkpoint itself as output",
     "import --architecture mobilenet_v2 @/w.safetensors --out @/w.safetensors", kNothing, 2,
     "would replace the checkpoint itself"},
    {"the checkpoint's own folder as output",
     "import --architecture mobilenet_v2 @/m/weights.safetensors --out @/m",
     [](Scene& s) {
       std::filesystem::create_directory(s.folder / "m");
       std::filesystem::copy(s.folder / "w.safetensors", s.folder / "m/weights.safetensors");
     },
     2, "would replace the checkpoint itself"},
    {"a list with more", "import --list @/w.safetensors", kNothing, 2, "--list stands alone"},
    {"two checkpoints", "import --architecture mobilenet_v2 @/w.safetensors @/x --out @/out",
     kNothing, 2, "/x"},
};

void expect_refused(std::span<const BadImport> cases) {
  for (const BadImport& bad : cases) {
    SCOPED_TRACE(bad.what);
    Scene scene;
    bad.spoil(scene);
    const ToolResult result = run_tool(words(bad.command, scene.folder));
    EXPECT_EQ(result.exit_code, bad.exit_code) << result.err;
    EXPECT_NE((result.err + "\n").find(bad.message), std::string::npos) << result.err;
    EXPECT_EQ(result.err.rfind("leadsman: ", 0), 0U) << result.err;
    EXPECT_EQ(result.out, "");
    EXPECT_FALSE(std::filesystem::exists(scene.folder / "out"));
  }
}

TEST(BadImport, Checkpoints) {
  expect_refused(kCheckpoints);
}
TEST(BadImport, Arguments) {
  expect_refused(kArguments);
}

TEST(BadImport, AFolderWithAnotherModelsReference) {
  const Scene scene;
  std::filesystem::create_directory(scene.folder / "out");
  write_file(scene.folder / "out/reference.safetensors", "of another model");
  const ToolResult result = run_tool(words(kImport, scene.folder));
  EXPECT_EQ(result.exit_code, 2);
  EXPECT_NE(result.err.find("belongs to another model"), std::string::npos) << result.err;
  EXPECT_FALSE(std::filesystem::exists(scene.folder / "out/weights.safetensors"));
}

}  // namespace
}  // namespace leadsman
