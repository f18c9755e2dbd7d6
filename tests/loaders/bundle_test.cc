#include "leadsman/bundle.h"

#include <cmath>
#include <cstring>
#include <filesystem>
#include <limits>
#include <string>
#include <vector>

#include <gtest/gtest.h>
#include <sys/stat.h>
#include <unistd.h>

#include "leadsman/tensor_file.h"
#include "loaders/half.h"
#include "tests/loaders/graph_examples.h"
#include "tests/loaders/tensor_bytes.h"
#include "tests/support/files.h"

namespace leadsman {
namespace {

namespace fs = std::filesystem;
using testing::graph_with;
using testing::input_error;
using testing::kGraphText;
using testing::read_file;
using testing::ScratchFolder;
using testing::usage_error;
using testing::write_file;

Tensor filled(const Shape& shape, float value) {
  Tensor tensor(shape);
  float* const data = tensor.mutable_data();
  for (std::int64_t i = 0; i < tensor.elements(); ++i) data[i] = value + static_cast<float>(i);
  return tensor;
}

// The weights that kGraphText names, and one more.
NamedTensors weights() {
  return {{"conv1.weight", filled({4, 3, 3, 3}, 1)},
          {"conv2.weight", filled({4, 4, 3, 3}, 2)},
          {"conv2.bias", filled({4}, 3)},
          {"not used", filled({2}, 4)}};
}

Metadata single_file(std::string_view graph) {
  return {{"leadsman_graph", std::string(graph)}, {"leadsman_labels", "round\nsquare\n"}};
}

class BundleFolder : public ::testing::Test {
 protected:
  void SetUp() override {
    write_file(folder_ / "graph.json", kGraphText);
    write_tensors(folder_ / "weights.safetensors", weights());
    write_file(folder_ / "labels.txt", "round\nsquare\n");
  }
  std::string load_error() {
    return input_error([this] { load_bundle(folder_.path()); });
  }
  // Replaces weights.safetensors.
  void set_weights(std::string_view header, const std::string& data) {
    std::string bytes = testing::safetensors_bytes(header, data.size());
    bytes.replace(bytes.size() - data.size(), data.size(), data);
    write_file(folder_ / "weights.safetensors", bytes);
  }
  ScratchFolder folder_;
};

void expect_small_bundle(const Bundle& bundle) {
  EXPECT_EQ(bundle.graph.name, "small");
  EXPECT_EQ(bundle.labels, (std::vector<std::string>{"round", "square"}));
  EXPECT_EQ(bundle.weights.size(), 3u);  // not the one that no layer names
  EXPECT_EQ(bundle.weights.at("conv2.bias").shape(), Shape{4});
  EXPECT_EQ(bundle.weights.at("conv2.bias").data()[2], 5.0f);
  ASSERT_TRUE(bundle.preprocess);
  EXPECT_EQ(bundle.preprocess->shorter_side, 10);
}

TEST_F(BundleFolder, IsLoaded) {
  const Bundle bundle = load_bundle(folder_.path());
  expect_small_bundle(bundle);
  EXPECT_EQ(bundle.path, folder_.path());
  EXPECT_EQ(bundle.reference_path, "");
  write_tensors(folder_ / "reference.safetensors", {});
  EXPECT_EQ(load_bundle(folder_.path()).reference_path, folder_ / "reference.safetensors");
}

TEST_F(BundleFolder, IsLoadedThroughLinks) {
  const ScratchFolder elsewhere;
  fs::rename(folder_ / "weights.safetensors", elsewhere / "blob");
  fs::create_symlink(elsewhere / "blob", folder_ / "weights.safetensors");
  fs::create_directory_symlink(folder_.path(), elsewhere / "model");
  expect_small_bundle(load_bundle(elsewhere / "model"));
}

TEST_F(BundleFolder, NeedsNeitherLabelsNorUnusedWeights) {
  fs::remove(folder_ / "labels.txt");
  EXPECT_TRUE(load_bundle(folder_.path()).labels.empty());
  write_file(folder_ / "graph.json",
             R"({"leadsman_graph": 1, "name": "g", "inputs": [{"name": "x", "shape": ["N", 4]}],
                 "outputs": ["y"], "layers": [{"name": "y", "operator": "activation",
                 "inputs": ["x"], "attributes": {"kind": "relu"}}]})");
  fs::remove(folder_ / "weights.safetensors");
  EXPECT_TRUE(load_bundle(folder_.path()).weights.empty());
}

TEST_F(BundleFolder, NarrowWeightsAreConverted) {
  const std::uint16_t half = loaders::float_to_half(1.5f);
  const std::uint16_t bfloat = loaders::float_to_bfloat16(-2.0f);
  const double wide = 0.25;
  write_file(folder_ / "graph.json", graph_with("\"attributes\": {\"kernel_size\": [3, 3]",
                                                "\"attributes\": {\"kernel_size\": [1, 1]"));
  set_weights(R"({"conv1.weight":{"dtype":"F16","shape":[1],"data_offsets":[0,2]},)"
              R"("conv2.weight":{"dtype":"BF16","shape":[1],"data_offsets":[2,4]},)"
              R"("num_batches_tracked":{"dtype":"I64","shape":[],"data_offsets":[4,12]},)"
              R"("conv2.bias":{"dtype":"F64","shape":[1],"data_offsets":[12,20]}})",
              testing::le(half) + testing::le(bfloat) + std::string(8, '\x7f') + testing::le(wide));
  const Bundle bundle = load_bundle(folder_.path());
  EXPECT_EQ(bundle.weights.at("conv1.weight").data()[0], 1.5f);
  EXPECT_EQ(bundle.weights.at("conv2.weight").data()[0], -2.0f);
  EXPECT_EQ(bundle.weights.at("conv2.bias").data()[0], 0.25f);
}

TEST_F(BundleFolder, MissingFilesAreNamed) {
  const std::string path = folder_.path();
  EXPECT_EQ(input_error([&] { load_bundle(path + "/nowhere"); }),
            path + "/nowhere: no such file or folder");
  EXPECT_EQ(input_error([&] { load_bundle(""); }), "an empty path where a file is wanted");
  EXPECT_EQ(input_error([&] { load_bundle(path + "/graph.json"); }),
            path + "/graph.json: is a graph alone; a bundle is the folder that holds it");
  fs::remove(folder_ / "weights.safetensors");
  EXPECT_EQ(load_error(), path + "/weights.safetensors: no such file or folder");
  fs::create_symlink("gone", folder_ / "weights.safetensors");
  EXPECT_EQ(load_error(),
            path + "/weights.safetensors: is a symbolic link to 'gone', which does not exist");
  fs::remove(folder_ / "weights.safetensors");
  fs::create_directory(folder_ / "weights.safetensors");
  EXPECT_EQ(load_error(), path + "/weights.safetensors: is a folder, not a file");
  fs::remove(folder_ / "graph.json");
  EXPECT_EQ(load_error(), path + ": is a folder without graph.json");
}

TEST_F(BundleFolder, OptionalFilesThatCannotBeReadAreErrors) {
  fs::remove(folder_ / "labels.txt");
  fs::create_symlink("gone", folder_ / "labels.txt");
  EXPECT_EQ(load_error(),
            folder_ / "labels.txt: is a symbolic link to 'gone', which does not exist");
  fs::remove(folder_ / "labels.txt");
  fs::create_directory(folder_ / "labels.txt");
  EXPECT_EQ(load_error(), folder_ / "labels.txt: is a folder, not a file");
  fs::remove(folder_ / "labels.txt");
  write_file(folder_ / "labels.txt", "a\n\nb\n");
  EXPECT_EQ(load_error(), folder_ / "labels.txt: line 2: is blank, and labels follow it");
}

TEST_F(BundleFolder, GraphErrorsNameTheFile) {
  write_file(folder_ / "graph.json", graph_with("\"add\"", "\"ad\""));
  EXPECT_EQ(load_error(),
            folder_ / "graph.json: /layers/3/operator: no operator is called 'ad'; nearest: 'add'");
  write_file(folder_ / "graph.json", std::string((4 << 20) + 1, ' '));
  EXPECT_EQ(load_error(), folder_ / "graph.json: holds 4194305 bytes, at most 4194304 are read");
  write_file(folder_ / "graph.json", "");
  EXPECT_EQ(load_error(), folder_ /
                              "graph.json: line 1, column 1: not valid JSON: while parsing value - "
                              "unexpected end of input; expected '[', '{', or a literal");
}

TEST_F(BundleFolder, WeightErrorsNameFileTensorAndLayer) {
  const std::string file = folder_ / "weights.safetensors";
  NamedTensors tensors = weights();
  tensors[2].first = "conv2.bais";
  write_tensors(file, tensors);
  EXPECT_EQ(load_error(), file +
                              ": no tensor is called 'conv2.bias', which is 'bias' of layer "
                              "'conv2'; nearest: 'conv2.bais'");

  struct Case {
    const char* bias;  // its description; the data begin with 12 bytes of other weights
    std::size_t bytes;
    const char* message;
  };
  const std::vector<Case> cases = {
      {R"("dtype":"I64","shape":[1],"data_offsets":[8,16])", 8,
       "is I64; weights are F32, F16, BF16 or F64"},
      {R"("dtype":"BOOL","shape":[4],"data_offsets":[8,12])", 4,
       "is BOOL; weights are F32, F16, BF16 or F64"},
      {R"("dtype":"F32","shape":[0,4],"data_offsets":[8,8])", 0, "is empty: its shape is [0, 4]"},
      {R"("dtype":"F32","shape":[1,1,1,1,1,1,1],"data_offsets":[8,12])", 4,
       "has 7 sizes, at most 6 can be used"},
  };
  for (const Case& bad : cases) {
    set_weights(
        R"({"conv1.weight":{"dtype":"F32","shape":[1],"data_offsets":[0,4]},)"
        R"("conv2.weight":{"dtype":"F32","shape":[1],"data_offsets":[4,8]},"conv2.bias":{)" +
            std::string(bad.bias) + "}}",
        std::string(8 + bad.bytes, '\0'));
    EXPECT_EQ(load_error(),
              file + ": tensor 'conv2.bias', 'bias' of layer 'conv2': " + bad.message);
  }
  write_file(file, "12345678{}");
  EXPECT_EQ(load_error(), file +
                              ": the header is said to take 4050765991979987505 bytes, the file "
                              "holds 2 after the first eight");
  write_file(file, "");
  EXPECT_EQ(load_error(), file + ": is empty");
}

TEST_F(BundleFolder, NonFiniteWeightsAreFoundUnlessNotLookedFor) {
  const std::string file = folder_ / "weights.safetensors";
  NamedTensors tensors = weights();
  tensors[1].second.mutable_data()[143] = std::numeric_limits<float>::quiet_NaN();
  write_tensors(file, tensors);
  EXPECT_EQ(
      load_error(),
      file +
          ": tensor 'conv2.weight', 'weight' of layer 'conv2': the element at [3, 3, 2, 2] is NaN");
  tensors[0].second.mutable_data()[9] = -std::numeric_limits<float>::infinity();
  write_tensors(file, tensors);
  EXPECT_EQ(load_error(), file +
                              ": tensor 'conv1.weight', 'weight' of layer 'conv1': the element at "
                              "[0, 1, 0, 0] is infinite");
  LoadOptions trusting;
  trusting.check_finite = false;
  EXPECT_TRUE(
      std::isinf(load_bundle(folder_.path(), trusting).weights.at("conv1.weight").data()[9]));
  // One that no layer names does not matter.
  tensors = weights();
  tensors[3].second.mutable_data()[0] = std::numeric_limits<float>::quiet_NaN();
  write_tensors(file, tensors);
  expect_small_bundle(load_bundle(folder_.path()));
}

TEST(BundleFile, IsLoaded) {
  const ScratchFolder folder;
  const std::string path = folder / "model.safetensors";
  write_tensors(path, weights(), single_file(kGraphText));
  const Bundle bundle = load_bundle(path);
  expect_small_bundle(bundle);
  EXPECT_EQ(bundle.path, path);
}

TEST(BundleFile, ErrorsNameTheKey) {
  const ScratchFolder folder;
  const std::string path = folder / "model.safetensors";
  const auto error = [&] { return input_error([&] { load_bundle(path); }); };
  write_tensors(path, weights());
  EXPECT_EQ(error(),
            path + ": holds tensors but no graph (no 'leadsman_graph' in its __metadata__)");
  write_tensors(path, weights(), single_file(graph_with("\"outputs\"", "\"output\"")));
  EXPECT_EQ(
      error(),
      path + ": __metadata__/leadsman_graph: the key 'output' is not known; nearest: 'outputs'");
  Metadata metadata = single_file(kGraphText);
  metadata["leadsman_labels"] = "a\n\nb";
  write_tensors(path, weights(), metadata);
  EXPECT_EQ(error(),
            path + ": __metadata__/leadsman_labels: line 2: is blank, and labels follow it");
  write_tensors(folder / "model.npz", weights());
  EXPECT_EQ(
      input_error([&] { load_bundle(folder / "model.npz"); }),
      folder / "model.npz: holds tensors but no graph (no 'leadsman_graph' in its __metadata__)");
}

TEST_F(BundleFolder, IsSavedInBothForms) {
  const Bundle bundle = load_bundle(folder_.path());
  const ScratchFolder target;
  for (const char* const name : {"copy", "copy.safetensors", "with slash/"}) {
    const std::string path = target / name;
    save_bundle(bundle, path);
    const Bundle again = load_bundle(path);
    expect_small_bundle(again);
    EXPECT_EQ(graph_text(again.graph, again.preprocess),
              graph_text(bundle.graph, bundle.preprocess));
    for (const auto& [tensor, value] : bundle.weights) {
      ASSERT_EQ(again.weights.at(tensor).shape(), value.shape());
      EXPECT_EQ(
          std::memcmp(again.weights.at(tensor).data(), value.data(), value.values().size_bytes()),
          0);
    }
  }
  EXPECT_EQ(target.count(), 3u);  // and nothing half-written beside
  struct stat status {};
  ASSERT_EQ(::stat((target / "copy").c_str(), &status), 0);
  const mode_t mask = ::umask(0);
  ::umask(mask);
  EXPECT_EQ(status.st_mode & 0777u, 0777u & ~mask);
}

TEST_F(BundleFolder, IsSavedOverItself) {
  Bundle bundle = load_bundle(folder_.path());
  bundle.weights["conv2.bias"] = filled({4}, 3);
  bundle.weights["conv1.weight"].mutable_data()[0] = 99;  // the rest is still mapped from the file
  save_bundle(bundle, folder_.path());
  const Bundle again = load_bundle(folder_.path());
  expect_small_bundle(again);
  EXPECT_EQ(again.weights.at("conv1.weight").data()[0], 99.0f);
  EXPECT_EQ(again.weights.at("conv2.weight").data()[7], 9.0f);
  bundle.labels.clear();
  save_bundle(bundle, folder_.path());
  EXPECT_FALSE(fs::exists(folder_ / "labels.txt"));
}

TEST_F(BundleFolder, IsNotSavedOverAnothersReference) {
  Bundle bundle = load_bundle(folder_.path());
  write_tensors(folder_ / "reference.safetensors", {});
  EXPECT_EQ(
      usage_error([&] { save_bundle(bundle, folder_.path()); }),
      folder_ /
          "reference.safetensors: belongs to another model; remove it before saving this one here");
  save_bundle(load_bundle(folder_.path()), folder_.path());  // its own stays
  EXPECT_TRUE(fs::exists(folder_ / "reference.safetensors"));
}

TEST_F(BundleFolder, IsNotSavedWhenItCouldNotBeLoaded) {
  const Bundle good = load_bundle(folder_.path());
  const ScratchFolder target;
  const std::string path = target / "copy";
  const auto error = [&](const Bundle& bundle) {
    return usage_error([&] { save_bundle(bundle, path); });
  };
  Bundle bad = good;
  bad.graph.layers[3].inputs[0] = "conv";
  EXPECT_EQ(error(bad), path +
                            ": the graph is not valid: /layers/3/inputs/0: no layer or input is "
                            "called 'conv'; nearest: 'conv1'");
  bad = good;
  bad.weights.erase("conv2.bias");
  EXPECT_EQ(error(bad), path + ": the weights lack 'conv2.bias', 'bias' of layer 'conv2'");
  bad = good;
  bad.preprocess->stddev = {0, 1, 1};
  EXPECT_NE(error(bad).find(path + ": the preprocessing is not valid: "), std::string::npos);
  bad = good;
  bad.labels = {"round", ""};
  EXPECT_EQ(error(bad), path + ": a label is blank or holds the end of a line");
  bad.labels = {"round", "a\nb"};
  EXPECT_EQ(error(bad), path + ": a label is blank or holds the end of a line");
  bad.labels = {"round", "\xff"};
  EXPECT_EQ(error(bad), path + ": line 2: is not UTF-8 from byte 1: '\\xff'");
  EXPECT_EQ(target.count(), 0u);
  EXPECT_EQ(input_error([&] { save_bundle(good, target / "no/copy"); }),
            target / "no/copy: cannot be made: the folder above it does not exist");
  write_file(target / "file", "");
  EXPECT_EQ(input_error([&] { save_bundle(good, target / "file"); }),
            target / "file: is a file, not a folder");
}

}  // namespace
}  // namespace leadsman
