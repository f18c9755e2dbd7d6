#include "profile_text.h"

#include <algorithm>
#include <map>

#include "text.h"

namespace leadsman::cli {
namespace {

using Json = nlohmann::ordered_json;

std::string kernel_name(const StepSummary& step) {
  return step.operator_name + "/" + step.strategy;
}

struct Work {
  double seconds = 0.0;
  std::int64_t macs = 0;
  int steps = 0;
};

// By kernel, the one that takes longest first.
std::vector<std::pair<std::string, Work>> by_kernel(const Plan& plan, const Profile& profile) {
  std::map<std::string, Work> sums;
  for (std::size_t i = 0; i < plan.steps().size(); ++i) {
    if (profile.steps[i].runs == 0) continue;  // views
    Work& work = sums[kernel_name(plan.steps()[i])];
    work.seconds += profile.steps[i].best_seconds;
    work.macs += plan.steps()[i].macs;
    ++work.steps;
  }
  std::vector<std::pair<std::string, Work>> sorted(sums.begin(), sums.end());
  std::ranges::sort(sorted, std::greater{}, [](const auto& entry) { return entry.second.seconds; });
  return sorted;
}

double gflops(double seconds, std::int64_t macs) {
  return seconds > 0.0 ? 2e-9 * static_cast<double>(macs) / seconds : 0.0;
}

std::string milliseconds(double seconds) {
  return fixed(seconds * 1e3, 3);
}

std::vector<std::string> figures(double seconds, std::int64_t macs, double whole, double peak) {
  const double rate = gflops(seconds, macs);
  return {milliseconds(seconds), fixed(100.0 * seconds / whole, 1) + "%",
          macs > 0 ? scaled(static_cast<double>(macs)) : "", macs > 0 ? fixed(rate, 1) : "",
          macs > 0 ? fixed(rate * 1e9 / peak, 2) : ""};
}

std::string layer_list(const StepSummary& step) {
  return step.layers.front() +
         (step.layers.size() > 1 ? " +" + std::to_string(step.layers.size() - 1) : "");
}

}  // namespace

void print_profile(std::ostream& out, const Plan& plan, const Profile& profile, double peak) {
  using Align = Table::Align;
  const std::vector<Table::Column> measured{{"ms", Align::kRight},
                                            {"share", Align::kRight},
                                            {"MACs", Align::kRight},
                                            {"GFLOP/s", Align::kRight},
                                            {"of peak", Align::kRight}};
  const double whole = profile.whole.best_seconds;
  const auto add = [&](Table& table, std::vector<std::string> names, double seconds,
                       std::int64_t macs) {
    for (std::string& cell : figures(seconds, macs, whole, peak)) names.push_back(std::move(cell));
    table.add(std::move(names));
  };

  std::vector<Table::Column> columns{
      {"step", Align::kRight}, {"layer", Align::kLeft, true}, {"kernel"}};
  columns.insert(columns.end(), measured.begin(), measured.end());
  Table steps(columns);
  for (std::size_t i = 0; i < plan.steps().size(); ++i) {
    if (profile.steps[i].runs == 0) continue;
    const StepSummary& step = plan.steps()[i];
    add(steps, {std::to_string(i + 1), layer_list(step), kernel_name(step)},
        profile.steps[i].best_seconds, step.macs);
  }
  steps.print(out);
  out << '\n';

  columns = {{"kernel"}, {"steps", Align::kRight}};
  columns.insert(columns.end(), measured.begin(), measured.end());
  Table kernels(columns);
  for (const auto& [name, work] : by_kernel(plan, profile)) {
    add(kernels, {name, std::to_string(work.steps)}, work.seconds, work.macs);
  }
  add(kernels, {"(input to memory order)", ""}, profile.input.best_seconds, 0);
  add(kernels, {"(the plan itself)", ""}, profile.plan.best_seconds, 0);
  add(kernels, {"whole run", ""}, whole, plan.macs());
  kernels.print(out);
  out << "\nbest of " << counted(profile.whole.runs, "run") << ", "
      << counted(plan.threads(), "thread") << ", " << instruction_set() << ", peak "
      << fixed(peak * 1e-9, 1) << " GFLOP/s\n";
}

Json profile_json(const Plan& plan, const Profile& profile, double peak) {
  Json document = {{"runs", profile.whole.runs},
                   {"threads", plan.threads()},
                   {"instruction_set", instruction_set()},
                   {"peak_gflops", peak * 1e-9},
                   {"seconds", profile.whole.best_seconds},
                   {"input_seconds", profile.input.best_seconds},
                   {"plan_seconds", profile.plan.best_seconds},
                   {"steps", Json::array()}};
  for (std::size_t i = 0; i < plan.steps().size(); ++i) {
    const StepSummary& step = plan.steps()[i];
    const PartTime& time = profile.steps[i];
    if (time.runs == 0) continue;
    document["steps"].push_back({{"layers", step.layers},
                                 {"operator", step.operator_name},
                                 {"kernel", step.strategy},
                                 {"seconds", time.best_seconds},
                                 {"share", time.best_seconds / profile.whole.best_seconds},
                                 {"macs", step.macs},
                                 {"gflops", gflops(time.best_seconds, step.macs)}});
  }
  return document;
}

}  // namespace leadsman::cli
