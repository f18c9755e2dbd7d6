// `time`, and the profile that `classify` shows, too.
#include <sstream>

#include <gtest/gtest.h>
#include <nlohmann/json.hpp>

#include "leadsman/tensor_file.h"
#include "tests/cli/tool.h"

namespace leadsman {
namespace {

using nlohmann::json;
using testing::kButtons;
using testing::kConv;
using testing::run_tool;
using testing::ScratchFolder;
using testing::ToolResult;

const std::string kPicture = kButtons + "/pictures/odd/walnut_shield_14.jpg";

std::vector<std::string> lines_of(const std::string& text) {
  std::vector<std::string> lines;
  std::istringstream stream(text);
  for (std::string line; std::getline(stream, line);) lines.push_back(line);
  return lines;
}

void expect_profile(const json& profile) {
  double steps = 0.0;
  for (const json& step : profile.at("steps")) {
    EXPECT_FALSE(step.at("layers").empty());
    EXPECT_NE(step.at("operator"), "flatten");  // a view takes no time
    EXPECT_GT(step.at("seconds").get<double>(), 0.0);
    EXPECT_EQ(step.at("gflops").get<double>() > 0.0, step.at("macs").get<double>() > 0.0);
    steps += step.at("seconds").get<double>();
  }
  const double whole = profile.at("seconds");
  EXPECT_LE(steps + profile.at("input_seconds").get<double>(), 1.5 * whole);
  EXPECT_GE(profile.at("plan_seconds").get<double>(), 0.0);
  EXPECT_GT(profile.at("peak_gflops").get<double>(), 0.1);
}

TEST(Time, GivesBestAndMedian) {
  const ToolResult result = run_tool(
      {"time", kConv, "--runs", "5", "--batch", "2", "--size", "48x80", "--threads=2", "--json"});
  ASSERT_EQ(result.exit_code, 0) << result.err;
  const json document = json::parse(result.out);
  EXPECT_EQ(document.at("inputs").at("image"), json({2, 3, 48, 80}));
  EXPECT_EQ(document.at("threads"), 2);
  EXPECT_GT(document.at("best_seconds").get<double>(), 0.0);
  EXPECT_GE(document.at("median_seconds").get<double>(), document.at("best_seconds"));
  const double gflops =
      2e-9 * document.at("macs").get<double>() / document.at("median_seconds").get<double>();
  EXPECT_NEAR(document.at("gflops"), gflops, 1e-6 * gflops);
}

TEST(Time, TakesTurnsAndSavesItsOutputs) {
  const ScratchFolder folder;
  const TensorFile reference = TensorFile::open(kConv + "/reference.safetensors");
  write_tensors(folder / "x.npy", {{"x", reference.read("image")}});
  const ToolResult result = run_tool(
      {"time", kConv, "--tensor", folder / "x.npy", "--out", folder / "out.npz", "--turns"},
      "3\n1\n");
  ASSERT_EQ(result.exit_code, 0) << result.err;
  const std::vector<std::string> lines = lines_of(result.out);
  ASSERT_EQ(lines.size(), 3U);
  EXPECT_GT(json::parse(lines[0]).at("peak_gflops").get<double>(), 0.1);
  EXPECT_EQ(json::parse(lines[1]).at("seconds").size(), 3U);
  EXPECT_EQ(json::parse(lines[2]).at("seconds").size(), 1U);
  const Tensor ours = TensorFile::open(folder / "out.npz").read("head");
  const Tensor theirs = reference.read("head");
  ASSERT_EQ(ours.shape(), theirs.shape());
  for (std::int64_t i = 0; i < ours.elements(); ++i) {
    EXPECT_NEAR(ours.data()[i], theirs.data()[i], 2e-4);
  }
}

TEST(Time, RefusesWhatIsNoNumberOfRuns) {
  for (const std::string line : {"many", "0", "-1", "3x", "99999999999"}) {
    const ToolResult result = run_tool({"time", kConv, "--turns"}, line + "\n");
    EXPECT_EQ(result.exit_code, 2) << line;
    EXPECT_NE(result.err.find("'" + line + "'"), std::string::npos) << result.err;
  }
  EXPECT_EQ(run_tool({"time", kConv, "--runs", "0"}).exit_code, 2);
  EXPECT_EQ(run_tool({"time", kConv, "--turns", "--profile"}).exit_code, 2);
}

TEST(Time, ProfilesSteps) {
  const ToolResult result = run_tool({"time", kConv, "--profile", "--runs", "3", "--json"});
  ASSERT_EQ(result.exit_code, 0) << result.err;
  expect_profile(json::parse(result.out));
  // Names give way to figures, which are as wide as the machine is slow.
  for (const std::size_t width : {80U, 200U}) {
    const ToolResult table = run_tool({"time", kConv, "--profile", "--runs", "3"}, "",
                                      "COLUMNS=" + std::to_string(width));
    ASSERT_EQ(table.exit_code, 0) << table.err;
    EXPECT_NE(table.out.find(width == 80U ? "conv2d/" : "stage1.conv1 +2"), std::string::npos);
    EXPECT_NE(table.out.find("whole run"), std::string::npos);
    for (const std::string& line : lines_of(table.out)) EXPECT_LE(line.size(), width) << line;
  }
}

TEST(Classify, ShowsAProfileWhenAsked) {
  const ToolResult result = run_tool({"classify", kConv, kPicture, "--profile", "--json"});
  ASSERT_EQ(result.exit_code, 0) << result.err;
  const std::vector<std::string> lines = lines_of(result.out);
  ASSERT_EQ(lines.size(), 2U);
  EXPECT_TRUE(json::parse(lines[0]).contains("top"));
  expect_profile(json::parse(lines[1]).at("profile"));
  const ToolResult table = run_tool({"classify", kConv, kPicture, "--profile"});
  EXPECT_NE(table.out.find("whole run"), std::string::npos);
}

}  // namespace
}  // namespace leadsman
