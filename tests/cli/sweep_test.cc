#include <csignal>
#include <sstream>

#include <gtest/gtest.h>
#include <nlohmann/json.hpp>

#include "tests/cli/tool.h"

namespace leadsman {
namespace {

using nlohmann::json;
using testing::kConv;
using testing::kVit;
using testing::read_file;
using testing::run_tool;
using testing::ScratchFolder;
using testing::ToolResult;
using testing::write_file;

std::vector<std::string> small_sweep(const std::vector<std::string>& more) {
  std::vector<std::string> arguments{"sweep",    kConv,         kVit + "/", "--sizes",
                                     "32:64:16", "--threads=1", "--repeat", "5"};
  arguments.insert(arguments.end(), more.begin(), more.end());
  return arguments;
}

TEST(Sweep, MeasuresBothModelsAtEverySize) {
  const ScratchFolder folder;
  const ToolResult result =
      run_tool(small_sweep({"--json", "--csv", folder / "s.csv", "--memory", "1GiB"}));
  ASSERT_EQ(result.exit_code, 0) << result.err;
  const json document = json::parse(result.out);
  EXPECT_EQ(result.err, "");  // no progress where nobody looks
  EXPECT_TRUE(document.at("complete").get<bool>());
  ASSERT_EQ(document.at("points").size(), 6U);
  for (std::size_t i = 0; i < 6; ++i) {
    const json& point = document["points"][i];
    EXPECT_EQ(point.at("model"), i % 2 == 0 ? "conv" : "vit");
    EXPECT_EQ(point.at("size"), 32 + 16 * (i / 2));
    EXPECT_EQ(point.at("samples_ms").size(), 5U);
    EXPECT_LE(point.at("min_ms"), point.at("p50_ms"));
    EXPECT_LE(point.at("p50_ms"), point.at("p99_ms"));
    EXPECT_GT(point.at("resident_bytes"), point.at("base_bytes"));
    double shares = 0.0;
    std::int64_t macs = 0;
    for (const json& family : point.at("families")) {
      shares += family.at("share").get<double>();
      macs += family.at("macs").get<std::int64_t>();
    }
    EXPECT_NEAR(shares, 1.0, 1e-9);
    EXPECT_EQ(macs, point.at("macs"));
  }
  EXPECT_EQ(document["points"][0]["tokens"], 0);
  EXPECT_EQ(document["points"][1]["tokens"], 17);  // 4 x 4 patches and the class
  ASSERT_EQ(document.at("growth").size(), 2U);
  EXPECT_NEAR(document["growth"][0]["macs_exponent"], 2.0, 0.01);
  EXPECT_EQ(document.at("budget").at("verdicts")[0].at("largest_size"), 64);
  EXPECT_GT(document.at("limits")[0].at("triad_gb_per_s").get<double>(), 0.0);
  const std::string csv = read_file(folder / "s.csv");
  EXPECT_EQ(std::ranges::count(csv, '\n'), 7);
}

TEST(Sweep, FitsEightyColumns) {
  const ToolResult result = run_tool(small_sweep({"--budget", "1s@p50", "--baseline", "/dev/null"}),
                                     "", "COLUMNS=80 NO_COLOR=1");
  EXPECT_EQ(result.exit_code, 3);  // no JSON in there
  const ToolResult table =
      run_tool(small_sweep({"--budget", "1s@p50"}), "", "COLUMNS=80 NO_COLOR=1");
  ASSERT_EQ(table.exit_code, 0) << table.err;
  for (const char* word : {"triad", "p99 ms", "matrix product", "time ~ size^", "largest"}) {
    EXPECT_NE(table.out.find(word), std::string::npos) << word;
  }
  EXPECT_EQ(table.out.find('\x1b'), std::string::npos);
  std::istringstream lines(table.out);
  for (std::string line; std::getline(lines, line);) EXPECT_LE(line.size(), 80U) << line;
}

TEST(Sweep, EndsWithOneWhenNothingFits) {
  const ToolResult result = run_tool(small_sweep({"--json", "--budget", "1us@p50"}));
  EXPECT_EQ(result.exit_code, 1) << result.err;
  EXPECT_EQ(json::parse(result.out)["budget"]["verdicts"][0]["largest_size"], 0);
}

TEST(Sweep, EndsWithOneWhenSlowerThanBefore) {
  const ScratchFolder folder;
  json earlier = json::parse(run_tool(small_sweep({"--json"})).out);
  for (json& point : earlier["points"]) point["samples_ms"] = {1e-6, 1e-6, 1e-6};
  write_file(folder / "fast.json", earlier.dump());
  const ToolResult slower = run_tool(small_sweep({"--json", "--baseline", folder / "fast.json"}));
  EXPECT_EQ(slower.exit_code, 1) << slower.err;
  EXPECT_EQ(json::parse(slower.out)["changes"][0]["verdict"], "slower");
  for (json& point : earlier["points"]) point["samples_ms"] = {1e6, 1e6, 1e6};
  write_file(folder / "slow.json", earlier.dump());
  const ToolResult faster = run_tool(small_sweep({"--json", "--baseline", folder / "slow.json"}));
  EXPECT_EQ(faster.exit_code, 0) << faster.err;
  EXPECT_EQ(json::parse(faster.out)["changes"][0]["verdict"], "faster");
}

TEST(Sweep, KeepsWhatWasMeasuredWhenInterrupted) {
  const ScratchFolder folder;
  // Far more sizes than there is time for; SIGINT comes while they are measured.
  const std::string command = std::string("timeout -s INT 6 ") + LEADSMAN_TOOL + " sweep " +
                              testing::shell_quoted(kConv) +
                              " --sizes 32:4096:1 --threads 1 --repeat 3 --json >" +
                              (folder / "out") + " 2>" + (folder / "err");
  std::system(command.c_str());
  const json document = json::parse(read_file(folder / "out"));
  EXPECT_FALSE(document.at("complete").get<bool>());
  EXPECT_LT(document.at("points").size(), 4000U);
  EXPECT_NE(read_file(folder / "err").find("stopped"), std::string::npos);
}

TEST(Sweep, RefusesWhatItCannotMeasure) {
  const auto error_of = [](const std::vector<std::string>& arguments) {
    const ToolResult result = run_tool(arguments);
    EXPECT_EQ(result.exit_code, 2) << result.err;
    return result.err;
  };
  EXPECT_NE(error_of({"sweep", kConv, "--sizes", "96:64"}).find("--sizes"), std::string::npos);
  EXPECT_NE(error_of({"sweep", kConv, "--sizes", "a"}).find("'a'"), std::string::npos);
  EXPECT_NE(error_of({"sweep", kConv, "--sizes", "32:64:0"}).find("'0'"), std::string::npos);
  EXPECT_NE(error_of({"sweep", kConv, "--threads", "0"}).find("--threads"), std::string::npos);
  EXPECT_NE(error_of({"sweep", kConv, "--cpus", "4000"}).find("CPU"), std::string::npos);
  EXPECT_NE(error_of({"sweep", kConv, "--cpus", "3-1"}).find("--cpus"), std::string::npos);
  EXPECT_NE(error_of({"sweep", kConv, "--budget", "fast"}).find("'fast'"), std::string::npos);
  EXPECT_NE(error_of({"sweep", kConv, kConv}).find("twice"), std::string::npos);
  const ToolResult unknown = run_tool({"sweep", "resnet8"});
  EXPECT_EQ(unknown.exit_code, 3);
  EXPECT_NE(unknown.err.find("resnet8: neither a bundle nor an architecture; nearest: 'resnet18'"),
            std::string::npos)
      << unknown.err;
}

}  // namespace
}  // namespace leadsman
