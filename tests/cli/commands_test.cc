// The contract that scripts rely on: fields, exit codes, streams.
#include <sstream>

#include <gtest/gtest.h>
#include <nlohmann/json.hpp>

#include "leadsman/bundle.h"
#include "leadsman/runner.h"
#include "leadsman/tensor_file.h"
#include "tests/cli/tool.h"
#include "tests/support/compare.h"
#include "tests/support/graph_builder.h"

namespace leadsman {
namespace {

using nlohmann::json;
using testing::kButtons;
using testing::kConv;
using testing::kVit;
using testing::run_tool;
using testing::ScratchFolder;
using testing::ToolResult;

const std::string kOrdinary = kButtons + "/pictures/ordinary";

std::string some_picture() {
  std::vector<std::string> pictures;
  for (const auto& entry : std::filesystem::directory_iterator(kOrdinary)) {
    pictures.push_back(entry.path().string());
  }
  return *std::ranges::min_element(pictures);
}

std::vector<json> lines_of(const std::string& text) {
  std::vector<json> lines;
  std::istringstream stream(text);
  for (std::string line; std::getline(stream, line);) lines.push_back(json::parse(line));
  return lines;
}

TEST(Describe, GivesItsContractFields) {
  const ToolResult result = run_tool({"describe", kConv, "--json"});
  ASSERT_EQ(result.exit_code, 0) << result.err;
  const json document = json::parse(result.out);
  std::int64_t macs = 0;
  for (const json& layer : document.at("layers")) {
    macs += layer.at("macs").get<std::int64_t>();
    EXPECT_TRUE(layer.at("layer").is_string() && layer.at("operator").is_string());
    EXPECT_TRUE(layer.at("shape").is_array() && layer.at("parameters").is_number());
  }
  EXPECT_EQ(document.at("macs"), macs);
  EXPECT_GT(document.at("parameters").get<int>(), 0);
  EXPECT_GT(document.at("planned_peak_bytes").get<int>(), 0);
}

TEST(Describe, PlansAnotherSize) {
  const json small = json::parse(run_tool({"describe", kConv, "--json"}).out);
  const json large = json::parse(run_tool({"describe", kConv, "--json", "--size", "128x96"}).out);
  EXPECT_EQ(large.at("inputs").at("image"), json({1, 3, 128, 96}));
  EXPECT_GT(large.at("macs").get<double>(), 2.5 * small.at("macs").get<double>());
  EXPECT_EQ(large.at("parameters"), small.at("parameters"));
}

TEST(Describe, FitsEightyColumnsAndShowsNoColourInAPipe) {
  for (const std::string option : {"--threads=2", "--oracle"}) {
    const ToolResult result = run_tool({"describe", kVit, option}, "", "COLUMNS=80");
    ASSERT_EQ(result.exit_code, 0) << result.err;
    EXPECT_EQ(result.out.find('\x1b'), std::string::npos);
    std::istringstream stream(result.out);
    for (std::string line; std::getline(stream, line);) EXPECT_LE(line.size(), 80U) << line;
  }
}

TEST(Classify, GivesOneObjectALineAndOrderedProbabilities) {
  const ToolResult result = run_tool({"classify", kConv, kOrdinary, "--json", "--top", "8"});
  ASSERT_EQ(result.exit_code, 0) << result.err;
  const std::vector<json> lines = lines_of(result.out);
  ASSERT_GE(lines.size(), 60U);
  for (const json& line : lines) {
    EXPECT_TRUE(line.at("picture").is_string());
    double sum = 0.0;
    double last = 1.0;
    for (const json& answer : line.at("top")) {
      EXPECT_TRUE(answer.at("label").is_string() && answer.at("index").is_number());
      const double probability = answer.at("probability");
      EXPECT_LE(probability, last);
      last = probability;
      sum += probability;
    }
    EXPECT_NEAR(sum, 1.0, 1e-9);  // all eight classes
  }
}

TEST(Classify, SkipsABadPictureAndSaysSoInTheExitCode) {
  const ScratchFolder folder;
  testing::write_file(folder / "bad.png", "no picture");
  const ToolResult result =
      run_tool({"classify", kConv, folder / "bad.png", some_picture(), "--json"});
  EXPECT_EQ(result.exit_code, 3);
  const std::vector<json> lines = lines_of(result.out);
  ASSERT_EQ(lines.size(), 2U);
  EXPECT_NE(lines[0].at("error").get<std::string>().find("bad.png"), std::string::npos);
  EXPECT_TRUE(lines[1].contains("top"));
}

TEST(Classify, ReadsAListFromStandardInput) {
  const ToolResult result =
      run_tool({"classify", kConv, "-", "--json"}, some_picture() + "\r\n\n" + some_picture());
  EXPECT_EQ(result.exit_code, 0) << result.err;
  EXPECT_EQ(lines_of(result.out).size(), 2U);
}

TEST(Classify, TheOracleGivesTheSameAnswers) {
  for (const std::string& bundle : {kConv, kVit}) {
    const json fast = lines_of(run_tool({"classify", bundle, some_picture(), "--json"}).out)[0];
    const json oracle =
        lines_of(run_tool({"classify", bundle, some_picture(), "--json", "--oracle"}).out)[0];
    EXPECT_EQ(fast.at("top")[0].at("label"), oracle.at("top")[0].at("label"));
    EXPECT_NEAR(fast.at("top")[0].at("probability").get<double>(),
                oracle.at("top")[0].at("probability").get<double>(), 1e-5);
  }
}

TEST(Verify, FindsNoDepartureInTheShippedBundles) {
  for (const std::string& bundle : {kConv, kVit}) {
    for (const std::string mode : {"isolated", "chained"}) {
      const ToolResult result = run_tool({"verify", bundle, "--mode", mode, "--json"});
      ASSERT_EQ(result.exit_code, 0) << result.err;
      const json document = json::parse(result.out);
      EXPECT_TRUE(document.at("first_departure").is_null());
      EXPECT_LT(document.at("worst_ratio").get<double>(), 1.0);
      EXPECT_LT(document.at("output_relative_l2").get<double>(), 1e-5);
      for (const json& layer : document.at("layers")) {
        for (const char* field : {"relative_l2", "max_over_rms", "threshold", "ratio"}) {
          EXPECT_TRUE(layer.at(field).is_number()) << field;
        }
        EXPECT_FALSE(layer.at("departs").get<bool>());
      }
    }
  }
}

TEST(Verify, NamesTheFirstDepartureAndEndsWithOne) {
  const ScratchFolder folder;
  Bundle bundle = load_bundle(kConv);
  Tensor& weight = bundle.weights.at("stage2.conv1.weight");
  weight.mutable_data()[7] += 0.5F;
  save_bundle(bundle, folder / "changed");
  const std::string reference = kConv + "/reference.safetensors";
  for (const std::string mode : {"isolated", "chained"}) {
    const ToolResult result =
        run_tool({"verify", folder / "changed", "--reference", reference, "--mode", mode});
    EXPECT_EQ(result.exit_code, 1) << result.err;
    EXPECT_NE(result.out.find("first departure: stage2.conv1\n"), std::string::npos) << result.out;
  }
}

TEST(Tap, SavesWhatTheLibraryComputes) {
  const ScratchFolder folder;
  const TensorFile reference = TensorFile::open(kVit + "/reference.safetensors");
  write_tensors(folder / "x.npy", {{"x", reference.read("image")}});
  for (const std::string name : {"out.npz", "out.safetensors"}) {
    const ToolResult result =
        run_tool({"tap", kVit, "--tensor", folder / "x.npy", "--layers",
                  "blocks.0.*,head,blocks.1.attention.*:weights", "--out", folder / name});
    ASSERT_EQ(result.exit_code, 0) << result.err;
    const TensorFile out = TensorFile::open(folder / name);
    EXPECT_TRUE(out.has("head"));
    EXPECT_TRUE(out.has("blocks.1.attention.attention:weights"));
    EXPECT_FALSE(out.has("blocks.1.norm1"));
    for (const std::string& layer : out.names()) {
      if (!reference.has(layer)) continue;
      const Tensor ours = out.read(layer);
      const Tensor theirs = reference.read(layer);
      ASSERT_EQ(ours.shape(), theirs.shape()) << layer;
      for (std::int64_t i = 0; i < ours.elements(); ++i) {
        ASSERT_NEAR(ours.data()[i], theirs.data()[i], 2e-4) << layer;
      }
    }
  }
}

TEST(Tap, DrawsSheetsAndHeads) {
  const ScratchFolder folder;
  const ToolResult result = run_tool({"tap", kVit, some_picture(), "--layers", "blocks.2.add*",
                                      "--sheets", folder / "sheets", "--heads", folder / "heads"});
  ASSERT_EQ(result.exit_code, 0) << result.err;
  std::size_t pictures = 0;
  for (const std::string sub : {"sheets", "heads"}) {
    for (const auto& entry : std::filesystem::directory_iterator(folder / sub)) {
      EXPECT_GT(read_picture(entry.path()).width, 50);
      ++pictures;
    }
  }
  EXPECT_GE(pictures, 3U);
}

TEST(Tool, HelpOfEveryCommandShowsAnExample) {
  for (const std::string command : {"describe", "classify", "tap", "verify", "time", "import"}) {
    const ToolResult result = run_tool({command, "--help"});
    EXPECT_EQ(result.exit_code, 0);
    EXPECT_NE(result.out.find("Example: leadsman " + command), std::string::npos);
  }
}

TEST(Tool, WithoutACommandItShowsHelpAndEndsWithTwo) {
  const ToolResult result = run_tool({});
  EXPECT_EQ(result.exit_code, 2);
  EXPECT_EQ(result.out, "");
  EXPECT_NE(result.err.find("classify"), std::string::npos);
}

}  // namespace
}  // namespace leadsman
