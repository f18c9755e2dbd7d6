// Checkpoints as they come, made into bundles by the library; tests/cli/import_test.cc has the
// errors as the command shows them.
#include <algorithm>

#include <gtest/gtest.h>

#include "leadsman/architectures.h"
#include "leadsman/runner.h"
#include "leadsman/tensor_file.h"
#include "tests/support/files.h"
#include "tests/support/random.h"

namespace leadsman {
namespace {

using testing::input_error;
using testing::ScratchFolder;
using testing::usage_error;

constexpr const char* kName = "mobilenet_v2";

NamedTensors seeded(const char* name = kName,
                    const ArchitectureOptions& options = {.classes = 12}) {
  const WeightMap weights = seeded_weights(build_architecture(name, options), 1);
  return {weights.begin(), weights.end()};
}

Tensor run_once(const Graph& graph, const WeightMap& weights, std::int64_t side) {
  PlanOptions options;
  options.input_shapes = input_shapes_at(graph, 1, side, side);
  Runner runner(Plan::make(graph, weights, options));
  runner.run(testing::Random(3).tensor({1, 3, side, side}));
  return to_tensor(runner.output());
}

bool same_bits(const Tensor& a, const Tensor& b) {
  return a.shape() == b.shape() && std::ranges::equal(a.values(), b.values());
}

TEST(ImportCheckpoint, ComputesWhatTheArchitectureComputesInMemory) {
  const ScratchFolder folder;
  const Architecture built = build_architecture(kName, {.classes = 12});
  const WeightMap weights = seeded_weights(built, 1);
  write_tensors(folder / "w.safetensors", {weights.begin(), weights.end()});
  const Bundle bundle = import_checkpoint(kName, folder / "w.safetensors");
  EXPECT_EQ(bundle.weights.at("classifier.1.weight").shape()[0], 12);
  save_bundle(bundle, folder / "bundle");
  const Bundle loaded = load_bundle(folder / "bundle");
  const Tensor expected = run_once(built.graph, weights, 64);
  EXPECT_TRUE(same_bits(run_once(bundle.graph, bundle.weights, 64), expected));
  EXPECT_TRUE(same_bits(run_once(loaded.graph, loaded.weights, 64), expected));
}

TEST(ImportCheckpoint, TakesOffTheNameOfAParallelModel) {
  const ScratchFolder folder;
  NamedTensors tensors = seeded();
  for (auto& [name, tensor] : tensors) name = "module." + name;
  write_tensors(folder / "w.safetensors", tensors);
  const Bundle bundle = import_checkpoint(kName, folder / "w.safetensors");
  EXPECT_TRUE(same_bits(
      bundle.weights.at("features.0.0.weight"),
      seeded_weights(build_architecture(kName, {.classes = 12}), 1).at("features.0.0.weight")));
  // Both namings at once would leave it open which tensor is meant.
  tensors.emplace_back("features.0.0.weight", Tensor({1}));
  write_tensors(folder / "w.safetensors", tensors);
  EXPECT_NE(input_error([&] {
              import_checkpoint(kName, folder / "w.safetensors");
            }).find("'module.features.0.0.weight' and 'features.0.0.weight' are names for one"),
            std::string::npos);
}

TEST(ImportCheckpoint, LeavesOutTheCountersOfBatchNorm) {
  const ScratchFolder folder;
  NamedTensors tensors = seeded();
  tensors.emplace_back("features.0.1.num_batches_tracked", Tensor(Shape{}));
  write_tensors(folder / "w.safetensors", tensors);
  const Bundle bundle = import_checkpoint(kName, folder / "w.safetensors");
  EXPECT_EQ(bundle.weights.size(), tensors.size() - 1);
}

TEST(ImportCheckpoint, LeavesOutWhatItIsTold) {
  const ScratchFolder folder;
  NamedTensors tensors = seeded();
  tensors.emplace_back("aux.weight", Tensor({3}));
  tensors.emplace_back("aux.bias", Tensor({3}));
  write_tensors(folder / "w.safetensors", tensors);
  const auto import = [&](std::vector<std::string> ignore) {
    ImportOptions options;
    options.ignore = std::move(ignore);
    return import_checkpoint(kName, folder / "w.safetensors", options);
  };
  EXPECT_NE(input_error([&] { import({"aux.weight"}); }).find("not known: 'aux.bias'"),
            std::string::npos);
  EXPECT_EQ(import({"aux.*"}).weights.size(), tensors.size() - 2);
  EXPECT_EQ(import({"*.weight", "aux.bias"}).weights.size(), tensors.size() - 2);
  EXPECT_NE(usage_error([&] {
              import({"aux.*", "classifier.*"});
            }).find("'classifier.*' matches no"),
            std::string::npos);
}

TEST(ImportCheckpoint, TellsAVisionTransformersSizeFromItsPositions) {
  const ScratchFolder folder;
  write_tensors(folder / "w.safetensors", seeded("vit_ti_32", {.classes = 5, .size = {160, 160}}));
  const Bundle bundle = import_checkpoint("vit_ti_32", folder / "w.safetensors");
  EXPECT_EQ(bundle.graph.inputs.front().usual_size, (std::vector<std::int64_t>{160, 160}));
  EXPECT_EQ(bundle.preprocess->crop->height, 160);
  // Another usual size leaves the positions alone: the plan interpolates them.
  ImportOptions options;
  options.size = PictureSize{96, 128};
  const Bundle other = import_checkpoint("vit_ti_32", folder / "w.safetensors", options);
  EXPECT_EQ(other.graph.inputs.front().usual_size, (std::vector<std::int64_t>{96, 128}));
  EXPECT_EQ(other.weights.at("encoder.pos_embedding").shape(), (Shape{1, 26, 192}));
}

TEST(ImportCheckpoint, KnowsTheOlderNamesOfAVisionTransformersMlp) {
  const ScratchFolder folder;
  NamedTensors tensors = seeded("vit_ti_32");
  int renamed = 0;
  for (auto& [name, tensor] : tensors) {
    for (const auto& [now, once] :
         {std::pair{".mlp.0.", ".mlp.linear_1."}, std::pair{".mlp.3.", ".mlp.linear_2."}}) {
      const std::size_t at = name.find(now);
      if (at == std::string::npos) continue;
      name.replace(at, 7, once);
      ++renamed;
    }
  }
  EXPECT_EQ(renamed, 12 * 4);
  write_tensors(folder / "w.safetensors", tensors);
  EXPECT_EQ(import_checkpoint("vit_ti_32", folder / "w.safetensors").weights.size(),
            tensors.size());
}

}  // namespace
}  // namespace leadsman
