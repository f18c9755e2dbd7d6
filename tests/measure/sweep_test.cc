#include "leadsman/sweep.h"

#include <cmath>

#include <gtest/gtest.h>
#include <nlohmann/json.hpp>

#include "leadsman/architectures.h"
#include "leadsman/error.h"
#include "leadsman/sweep_report.h"
#include "tests/support/graph_builder.h"

namespace leadsman {
namespace {

using nlohmann::json;

// MACs of each family of an untrained architecture at a size, and of all.
std::map<std::string, double> macs_at(const Architecture& built, const WeightMap& weights,
                                      std::int64_t size) {
  PlanOptions options;
  options.input_shapes = input_shapes_at(built.graph, 1, size, size);
  options.reference_kernels = true;
  const auto plan = Plan::make(built.graph, weights, options);
  std::map<std::string, double> macs;
  for (const FamilyWork& work : step_work(built.graph, weights, *plan)) {
    macs[work.family] += static_cast<double>(work.macs);
    macs["all"] += static_cast<double>(work.macs);
  }
  return macs;
}

double exponent(double small, double large, double ratio) {
  return std::log(large / small) / std::log(ratio);
}

TEST(Growth, OfConvolutionIsTheSquareOfTheSide) {
  const Architecture built = build_architecture("resnet18");
  const WeightMap weights = seeded_weights(built, 1);
  const auto small = macs_at(built, weights, 96);
  const auto large = macs_at(built, weights, 384);
  EXPECT_NEAR(exponent(small.at("convolution"), large.at("convolution"), 4.0), 2.0, 1e-9);
}

TEST(Growth, OfAttentionIsTheFourthPowerOfTheSide) {
  const Architecture built = build_architecture("vit_ti_16");
  const WeightMap weights = seeded_weights(built, 1);
  const auto small = macs_at(built, weights, 192);
  const auto large = macs_at(built, weights, 768);
  // 145 and 2305 tokens, the class token among them: (2305 / 145)^2 at four times the side.
  EXPECT_NEAR(large.at("attention") / small.at("attention"), std::pow(2305.0 / 145.0, 2), 1.0);
  EXPECT_NEAR(exponent(small.at("attention"), large.at("attention"), 4.0), 4.0, 0.02);
  EXPECT_NEAR(exponent(small.at("matrix product"), large.at("matrix product"), 4.0), 2.0, 0.02);
}

TEST(StepWork, CountsInputOutputAndWeights) {
  testing::GraphBuilder builder;
  builder.output(builder.conv("conv", builder.image(4, 8, 8), 4, 4, 3, 1, 4));
  check_graph(builder.graph());
  const auto plan = Plan::make(builder.graph(), builder.weights());
  const std::vector<FamilyWork> work = step_work(builder.graph(), builder.weights(), *plan);
  ASSERT_EQ(work.size(), 1U);
  EXPECT_EQ(work[0].family, "depthwise");
  EXPECT_EQ(work[0].macs, 4 * 9 * 64);
  std::int64_t weights = 0;
  for (const auto& [name, tensor] : builder.weights()) weights += tensor.elements();
  EXPECT_EQ(work[0].bytes, 4 * (4 * 64 + 4 * 64 + weights));
}

// Points with made-up times: what is concluded from them is known.
SweepPoint point(const std::string& model, std::int64_t size, double milliseconds,
                 std::int64_t bytes = 0) {
  SweepPoint made;
  made.model = model;
  made.size = size;
  made.threads = 1;
  made.macs = 1000 * size * size;
  made.predicted_bytes = bytes;
  for (int i = 0; i < 8; ++i) made.samples.push_back({1e-3 * milliseconds, false, false});
  made.families = {{"convolution", 1e-3 * milliseconds, made.macs, 1000}};
  return made;
}

Sweep made_up() {
  Sweep sweep;
  BoardLimits limits;
  limits.threads = 1;
  limits.peak_flops = 1e9;
  limits.stream.triad = 1e9;
  sweep.limits = {limits};
  for (const std::int64_t size : {100, 200, 300, 400}) {
    const auto side = static_cast<double>(size);
    sweep.points.push_back(point("square", size, 1e-3 * side * side, size << 20));
    SweepPoint attends = point("attends", size, 0.0);
    attends.tokens = size * size / 100;
    const auto tokens = static_cast<double>(attends.tokens);
    for (SweepSample& sample : attends.samples) {
      sample.seconds = 1e-5 * tokens + 1e-8 * tokens * tokens;
    }
    sweep.points.push_back(attends);
  }
  return sweep;
}

TEST(Conclusions, FindTheGrowthThatWasMadeUp) {
  const std::vector<Growth> growth = growth_of(made_up());
  ASSERT_EQ(growth.size(), 2U);
  EXPECT_NEAR(growth[0].time.exponent, 2.0, 1e-9);
  EXPECT_NEAR(growth[0].macs_exponent, 2.0, 1e-9);
  EXPECT_EQ(growth[0].held_out.value().size, 400);
  EXPECT_NEAR(growth[0].held_out->predicted.value, 0.160, 1e-9);
  EXPECT_FALSE(growth[0].tokens);
  // 1e-8 t = 1e-5 at 1000 tokens: side 316.
  EXPECT_NEAR(growth[1].tokens.value().half_size, std::sqrt(1000.0 * 100.0), 1e-3);
  EXPECT_NEAR(growth[1].tokens->tenth_size, std::sqrt(1000.0 / 9.0 * 100.0), 1e-3);
}

TEST(Budgets, AreParsed) {
  Budget budget;
  parse_time_budget("50ms@p90", budget);
  EXPECT_DOUBLE_EQ(budget.seconds.value(), 0.05);
  EXPECT_DOUBLE_EQ(budget.at, 0.9);
  parse_time_budget("0.2s", budget);
  EXPECT_DOUBLE_EQ(budget.seconds.value(), 0.2);
  EXPECT_DOUBLE_EQ(budget.at, 0.99);
  parse_memory_budget("64MiB", budget);
  EXPECT_EQ(budget.bytes.value(), 64 * 1024 * 1024);
  parse_memory_budget("1.5GB", budget);
  EXPECT_EQ(budget.bytes.value(), 1.5e9);
  for (const char* wrong : {"", "50", "ms", "-1ms", "50ms@", "50ms@99", "50ms@p101", "50ms@p99x",
                            "0ms", "infs", "nanms", "50 ms"}) {
    EXPECT_THROW(parse_time_budget(wrong, budget), Error) << wrong;
  }
  for (const char* wrong : {"", "MiB", "0MiB", "-1MiB", "64mib", "1e999GB"}) {
    EXPECT_THROW(parse_memory_budget(wrong, budget), Error) << wrong;
  }
}

TEST(Budgets, FindTheLargestSizeAndWhatStopsTheNext) {
  const Sweep sweep = made_up();
  Budget budget;
  budget.seconds = 0.05;
  BudgetVerdict verdict = judge_budget(sweep, budget)[0];
  EXPECT_EQ(verdict.largest, 200);
  EXPECT_EQ(verdict.next, 300);
  EXPECT_EQ(verdict.reason, "90 ms at p99, over 50 ms");
  budget.bytes = 0x1p20 * 150;
  verdict = judge_budget(sweep, budget)[0];
  EXPECT_EQ(verdict.largest, 100);
  EXPECT_EQ(verdict.reason, "200 MiB by the plan, over 150 MiB");
  budget.bytes = 1.0;
  EXPECT_EQ(judge_budget(sweep, budget)[0].largest, 0);
  EXPECT_EQ(judge_budget(sweep, {})[0].largest, 400);
  EXPECT_EQ(judge_budget(sweep, {})[0].next, 0);
}

TEST(Comparison, MatchesPointsAndFindsWhatIsSlower) {
  const Sweep today = made_up();
  const std::vector<SweepPoint> earlier{point("square", 200, 20.0), point("square", 300, 90.0),
                                        point("another", 100, 1.0)};
  const std::vector<Change> changes = compare_sweeps(earlier, today);
  ASSERT_EQ(changes.size(), 2U);
  EXPECT_TRUE(changes[0].slower());
  EXPECT_NEAR(changes[0].ratio, 2.0, 1e-9);
  EXPECT_FALSE(changes[1].slower() || changes[1].faster());
  EXPECT_THROW(compare_sweeps({earlier[2]}, today), Error);
}

TEST(Report, CsvHoldsTheFiguresOfTheJson) {
  SweepReport report;
  report.sweep = made_up();
  report.sweep.points[1].model = "with \"quotes\", commas";
  const json document = json::parse(sweep_json(report));
  const std::string csv = sweep_csv(report);
  const std::string header = csv.substr(0, csv.find('\n'));
  EXPECT_TRUE(header.starts_with("model,size,threads,runs,min_ms,p50_ms,p90_ms,p99_ms")) << header;
  const json& first = document["points"][0];
  std::string row = "square";
  std::string name;
  std::size_t begin = header.find(',') + 1;
  while (begin <= header.size()) {
    const std::size_t end = std::min(header.find(',', begin), header.size());
    const json& value = first.at(header.substr(begin, end - begin));
    row += "," + (value.is_null()     ? ""
                  : value.is_string() ? value.get<std::string>()
                                      : value.dump());
    begin = end + 1;
  }
  EXPECT_NE(csv.find('\n' + row + '\n'), std::string::npos) << row;
  EXPECT_NE(csv.find("\n\"with \"\"quotes\"\", commas\",100,"), std::string::npos);
}

TEST(Report, PointsAreReadBack) {
  SweepReport report;
  report.sweep = made_up();
  const std::vector<SweepPoint> points = read_sweep_points(sweep_json(report), "a.json");
  ASSERT_EQ(points.size(), report.sweep.points.size());
  EXPECT_EQ(points[2].model, "square");
  EXPECT_EQ(points[2].size, 200);
  EXPECT_NEAR(points[2].seconds_at(0.5), 0.04, 1e-12);
  for (const char* wrong :
       {"", "[]", "{}", R"({"format":"leadsman sweep 1"})", R"({"format":"other","points":[]})",
        R"({"format":"leadsman sweep 1","points":[{"model":1}]})"}) {
    try {
      read_sweep_points(wrong, "a.json");
      FAIL() << wrong;
    } catch (const Error& error) {
      EXPECT_EQ(error.kind(), ErrorKind::kInput);
      EXPECT_TRUE(std::string(error.what()).starts_with("a.json: ")) << error.what();
    }
  }
}

TEST(RunSweep, TakesTurnsAndKeepsWhatIsComplete) {
  const Architecture built = build_architecture("vit_ti_16", {10, {32, 32}});
  const std::vector<SweepModel> models{{"a", built.graph, seeded_weights(built, 1)},
                                       {"b", built.graph, seeded_weights(built, 2)}};
  SweepOptions options;
  options.sizes = {8, 32, 48};  // 8 is less than a patch
  options.threads = {1};
  options.rounds = 3;
  int sizes = 0;
  options.progress = [&](double share) { sizes += share > 0.0 ? 1 : 0; };
  options.stop = [&] { return sizes == 2; };
  const Sweep sweep = run_sweep(models, options);
  EXPECT_FALSE(sweep.complete);
  ASSERT_EQ(sweep.points.size(), 4U);
  EXPECT_FALSE(sweep.points[0].failure.empty());
  EXPECT_EQ(sweep.points[3].model, "b");
  EXPECT_EQ(sweep.points[2].failure, "");
  EXPECT_EQ(sweep.points[2].samples.size(), 3U);
  EXPECT_EQ(sweep.points[2].tokens, 5);
  EXPECT_FALSE(sweep.points[2].unstable.empty());  // 3 runs tell nothing
  EXPECT_GT(sweep.points[2].bytes(), 4 * 5000000);
  EXPECT_THROW(run_sweep({}, options), Error);
}

}  // namespace
}  // namespace leadsman
