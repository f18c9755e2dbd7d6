// verify --image: from the file to the input, stage by stage.
#include <gtest/gtest.h>
#include <nlohmann/json.hpp>

#include "leadsman/bundle.h"
#include "leadsman/runner.h"
#include "leadsman/tensor_file.h"
#include "tests/cli/tool.h"
#include "tests/support/reference_stages.h"

namespace leadsman {
namespace {

using nlohmann::json;
using testing::kButtons;
using testing::kConv;
using testing::run_tool;
using testing::ScratchFolder;
using testing::ToolResult;

const std::string kJpeg = kButtons + "/pictures/odd/walnut_shield_14.jpg";
const std::string kPng = kButtons + "/pictures/ordinary/brass_shield_00.png";

bool says(const std::string& text, const std::string& what) {
  return text.find(what) != std::string::npos;
}

// A reference of the shipped model for what another library made of a picture; every layer is
// what the oracle computes.
void write_reference(const std::string& path, const Picture& decoded, const Preprocess& settings) {
  const Bundle bundle = load_bundle(kConv);
  std::map<std::string, Tensor> stages = testing::stages_of(decoded, settings, "image");
  PlanOptions options;
  options.input_shapes = {stages["image"].shape()};
  options.reference_kernels = true;
  options.observe = {"*"};
  Runner runner(Plan::make(bundle.graph, bundle.weights, options));
  NamedTensors tensors(stages.begin(), stages.end());
  runner.add_hook("*", [&](const HookedOutput& output) {
    tensors.emplace_back(output.layer(), output.read());
  });
  runner.run(stages["image"]);
  write_tensors(path, tensors);
}

ToolResult verify(const std::string& reference, const std::string& picture, bool as_json) {
  std::vector<std::string> arguments{"verify", kConv, "--reference", reference, "--image", picture};
  if (as_json) arguments.push_back("--json");
  return run_tool(arguments);
}

// The references were written by the exporter: the stages are Pillow's and torchvision's.
TEST(VerifyPicture, EveryStageOfTheShippedBundlesIsPillows) {
  for (const std::string name : {"conv", "vit"}) {
    const std::string bundle = kButtons + "/bundles/" + name;
    const ToolResult text = run_tool({"verify", bundle, "--image", kJpeg});
    EXPECT_EQ(text.exit_code, 0) << text.err;
    EXPECT_TRUE(says(text.out, "every stage is the reference's")) << text.out;
    EXPECT_TRUE(says(text.out, "layers compared")) << text.out;

    const ToolResult result = run_tool({"verify", bundle, "--image", kJpeg, "--json"});
    EXPECT_EQ(result.exit_code, 0) << result.err;
    const json picture = json::parse(result.out).at("picture");
    EXPECT_EQ(picture.at("file"), kJpeg);
    ASSERT_EQ(picture.at("stages").size(), 4u);
    for (const json& stage : picture.at("stages")) {
      EXPECT_EQ(stage.at("largest_levels"), 0.0) << stage;
      EXPECT_EQ(stage.at("alone_largest_levels"), 0.0) << stage;
      EXPECT_FALSE(stage.at("departs")) << stage;
    }
    EXPECT_TRUE(picture.at("first_departure").is_null());
    EXPECT_FALSE(picture.at("only_decoder_differs"));
    EXPECT_EQ(picture.at("output_relative_l2"), 0.0);
  }
  EXPECT_FALSE(json::parse(run_tool({"verify", kConv, "--json"}).out).contains("picture"));
}

TEST(VerifyPicture, ADecoderMayDifferByALevelOrTwoForJpegAlone) {
  const ScratchFolder folder;
  const Preprocess settings = *load_bundle(kConv).preprocess;
  for (const auto& [file, levels, code] :
       {std::tuple{kJpeg, 1, 0}, {kJpeg, 3, 0}, {kJpeg, 4, 1}, {kPng, 1, 1}}) {
    testing::Random random(5);
    write_reference(folder / "reference.safetensors",
                    testing::decoded_otherwise(read_picture(file), levels, 0.25, random), settings);
    const ToolResult text = verify(folder / "reference.safetensors", file, false);
    EXPECT_EQ(text.exit_code, code) << text.out << text.err;
    EXPECT_EQ(says(text.out, "only the decoder differs, by " + std::to_string(levels)), code == 0)
        << text.out;
    EXPECT_EQ(says(text.out, "first stage that departs: decoded"), code == 1) << text.out;
    EXPECT_TRUE(says(text.out, "the output moves by")) << text.out;
    EXPECT_TRUE(says(text.out, "the top label stays")) << text.out;

    const json picture =
        json::parse(verify(folder / "reference.safetensors", file, true).out).at("picture");
    EXPECT_EQ(picture.at("only_decoder_differs"), code == 0);
    EXPECT_EQ(picture.at("stages")[0].at("largest_levels"), levels);
    EXPECT_NEAR(picture.at("stages")[0].at("share").get<double>(), 0.25, 0.02);
    EXPECT_EQ(picture.at("stages")[1].at("alone_largest_levels"), 0.0);
    EXPECT_GT(picture.at("output_relative_l2").get<double>(), 0.0);
    EXPECT_EQ(picture.at("label"), picture.at("reference_label"));
  }
}

TEST(VerifyPicture, NamesTheStageThatDeparts) {
  const ScratchFolder folder;
  Preprocess settings = *load_bundle(kConv).preprocess;
  settings.interpolation = Interpolation::kNearest;  // not antialiased
  write_reference(folder / "reference.safetensors", read_picture(kJpeg), settings);
  const ToolResult text = verify(folder / "reference.safetensors", kJpeg, false);
  EXPECT_EQ(text.exit_code, 1);
  EXPECT_TRUE(says(text.out, "first stage that departs: resized")) << text.out;
  EXPECT_TRUE(says(text.out, "layers compared (isolated), 0 depart")) << text.out;
  const json picture =
      json::parse(verify(folder / "reference.safetensors", kJpeg, true).out).at("picture");
  EXPECT_EQ(picture.at("first_departure"), "resized");
  EXPECT_TRUE(picture.at("stages")[1].at("departs"));
  EXPECT_FALSE(picture.at("stages")[2].at("departs"));
}

TEST(VerifyPicture, AsksForTheReferencesPicture) {
  const ToolResult result = run_tool({"verify", kConv, "--image", kPng});
  EXPECT_EQ(result.exit_code, 1);
  EXPECT_TRUE(says(result.out, "is it another picture?")) << result.out;
}

TEST(VerifyPicture, SizesThatDifferAreNullInJson) {
  const ScratchFolder folder;
  write_png(folder / "small.png", Picture{5, 4, std::vector<std::uint8_t>(60, 9)});
  const ToolResult result = run_tool({"verify", kConv, "--image", folder / "small.png", "--json"});
  EXPECT_EQ(result.exit_code, 1) << result.err;
  const json decoded = json::parse(result.out).at("picture").at("stages")[0];
  EXPECT_TRUE(decoded.at("largest_levels").is_null());
  EXPECT_EQ(decoded.at("remark"), "4x5 instead of 96x120");
}

TEST(VerifyPicture, SaysHowStagesAreMadeAndWhatIsMissing) {
  const ScratchFolder folder;
  const TensorFile whole = TensorFile::open(kConv + "/reference.safetensors");
  NamedTensors layers;
  for (const std::string& name : whole.names()) {
    if (name.find(':') == std::string::npos) layers.emplace_back(name, whole.read(name));
  }
  write_tensors(folder / "layers.safetensors", layers);
  ToolResult result = verify(folder / "layers.safetensors", kJpeg, false);
  EXPECT_EQ(result.exit_code, 3);
  EXPECT_EQ(result.out, "");
  EXPECT_TRUE(says(result.err, "layers.safetensors: holds no stages of a picture")) << result.err;
  EXPECT_TRUE(says(result.err, "--picture FILE")) << result.err;

  result = run_tool({"verify", kConv, "--image", folder / "none.jpg"});
  EXPECT_EQ(result.exit_code, 3);
  EXPECT_TRUE(says(result.err, "none.jpg: no such file")) << result.err;

  Bundle bundle = load_bundle(kConv);
  bundle.preprocess.reset();
  save_bundle(bundle, folder / "bare");
  result = run_tool({"verify", folder / "bare", "--reference", kConv + "/reference.safetensors",
                     "--image", kJpeg});
  EXPECT_EQ(result.exit_code, 3);
  EXPECT_TRUE(says(result.err, "bare: graph.json has no 'preprocess'")) << result.err;
}

}  // namespace
}  // namespace leadsman
