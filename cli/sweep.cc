#include <algorithm>
#include <charconv>
#include <csignal>
#include <fstream>
#include <iostream>
#include <iterator>
#include <map>

#include "commands.h"
#include "leadsman/error.h"
#include "leadsman/sweep_report.h"
#include "options.h"
#include "sweep_models.h"
#include "sweep_text.h"
#include "text.h"

namespace leadsman::cli {
namespace {

struct SweepCommandOptions {
  std::vector<std::string> models;
  std::string sizes = "96:384:32";
  std::string threads;
  int repeat = 20;
  std::string cpus;
  std::string accuracy = "fast";
  std::string budget;
  std::string memory;
  std::string baseline;
  std::string csv;
  std::string html;
  bool json = false;
  bool resident = false;

  Accuracy parsed_accuracy() const {
    return accuracy == "exact" ? Accuracy::kExact : Accuracy::kFast;
  }
};

volatile std::sig_atomic_t interrupted = 0;

// While it lives, Ctrl-C only raises `interrupted`; a second one ends the process.
class InterruptWatch {
 public:
  InterruptWatch() {
    struct sigaction action {};
    action.sa_handler = [](int) { interrupted = 1; };
    action.sa_flags = static_cast<int>(SA_RESETHAND) | SA_RESTART;
    sigaction(SIGINT, &action, &before_);
  }
  ~InterruptWatch() { sigaction(SIGINT, &before_, nullptr); }
  InterruptWatch(const InterruptWatch&) = delete;
  InterruptWatch& operator=(const InterruptWatch&) = delete;

 private:
  struct sigaction before_ {};
};

std::int64_t whole_number(std::string_view text, std::int64_t least, std::int64_t most,
                          const std::string& option) {
  std::int64_t value = 0;
  const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), value);
  if (error != std::errc{} || end != text.data() + text.size() || value < least || value > most) {
    throw_usage(option + ": '" + std::string(text) + "' is no number from " +
                std::to_string(least) + " to " + std::to_string(most));
  }
  return value;
}

// "96:384:32", "96,128,224" or "224"; in rising order, each once.
std::vector<std::int64_t> parse_sizes(const std::string& text) {
  constexpr std::int64_t kMost = 65535;
  std::vector<std::int64_t> sizes;
  const std::size_t first = text.find(':');
  if (first == std::string::npos) {
    for (const std::string& part : split_list(text)) {
      sizes.push_back(whole_number(part, 1, kMost, "--sizes"));
    }
  } else {
    const std::size_t second = std::min(text.find(':', first + 1), text.size());
    const auto begin = whole_number(text.substr(0, first), 1, kMost, "--sizes");
    const auto end = whole_number(text.substr(first + 1, second - first - 1), 1, kMost, "--sizes");
    const auto step =
        second == text.size() ? 32 : whole_number(text.substr(second + 1), 1, kMost, "--sizes");
    for (std::int64_t size = begin; size <= end; size += step) sizes.push_back(size);
  }
  std::ranges::sort(sizes);
  sizes.erase(std::unique(sizes.begin(), sizes.end()), sizes.end());
  if (sizes.empty()) throw_usage("--sizes: '" + text + "' names no size");
  return sizes;
}

std::vector<int> parse_threads(const std::string& text) {
  std::vector<int> threads;
  for (const std::string& part : split_list(text)) {
    const int count = static_cast<int>(whole_number(part, 1, 1024, "--threads"));
    if (std::ranges::find(threads, count) == threads.end()) threads.push_back(count);
  }
  if (threads.empty()) threads.push_back(read_board().usable_cpus);
  return threads;
}

// "0,2-3"
std::vector<int> parse_cpus(const std::string& text) {
  std::vector<int> cpus;
  for (const std::string& part : split_list(text)) {
    const std::size_t dash = std::min(part.find('-'), part.size());
    const auto begin = whole_number(part.substr(0, dash), 0, 4095, "--cpus");
    const auto end =
        dash == part.size() ? begin : whole_number(part.substr(dash + 1), begin, 4095, "--cpus");
    for (std::int64_t cpu = begin; cpu <= end; ++cpu) cpus.push_back(static_cast<int>(cpu));
  }
  return cpus;
}

std::string read_text(const std::string& path) {
  std::ifstream file(path, std::ios::binary);
  std::string text{std::istreambuf_iterator<char>(file), {}};
  if (!file) throw_input(path + ": cannot be read");
  return text;
}

void write_text(const std::string& path, const std::string& text) {
  std::ofstream file(path, std::ios::binary);
  file << text;
  file.close();
  if (!file) throw_input(path + ": cannot be written");
}

Sweep measure(const SweepCommandOptions& options) {
  const std::vector<SweepModel> models = load_sweep_models(options.models);
  std::map<std::string, std::string> arguments;
  for (std::size_t i = 0; i < models.size(); ++i) arguments[models[i].name] = options.models[i];
  SweepOptions wanted;
  wanted.sizes = parse_sizes(options.sizes);
  wanted.threads = parse_threads(options.threads);
  wanted.rounds = options.repeat;
  wanted.accuracy = options.parsed_accuracy();
  wanted.resident = [&](const SweepModel& model, std::int64_t size, int threads) {
    return resident_of(arguments.at(model.name), size, threads, options.parsed_accuracy());
  };
  Progress progress("sweep");
  wanted.progress = [&](double share) { progress.show_share(share); };
  wanted.stop = [] { return interrupted != 0; };
  const InterruptWatch watch;
  Sweep sweep = run_sweep(models, wanted);
  progress.clear();
  if (!sweep.complete) std::cerr << "leadsman: stopped; the sizes measured so far are kept\n";
  return sweep;
}

// 1 when a budget was given and no model fits, or when something became slower.
int finding(const SweepReport& report) {
  const auto fits = [](const BudgetVerdict& verdict) { return verdict.largest > 0; };
  if (report.budget && std::ranges::none_of(report.verdicts, fits)) return 1;
  return std::ranges::any_of(report.changes, &Change::slower) ? 1 : 0;
}

int run(const SweepCommandOptions& options) {
  if (!options.cpus.empty()) pin_to_cpus(parse_cpus(options.cpus));
  if (options.resident) {
    return print_resident(options.models.front(), parse_sizes(options.sizes).front(),
                          parse_threads(options.threads).front(), options.parsed_accuracy());
  }
  SweepReport report;
  // What is wrong with these shows before an hour is spent.
  if (!options.budget.empty() || !options.memory.empty()) {
    report.budget.emplace();
    if (!options.budget.empty()) parse_time_budget(options.budget, *report.budget);
    if (!options.memory.empty()) parse_memory_budget(options.memory, *report.budget);
  }
  std::vector<SweepPoint> earlier;
  if (!options.baseline.empty()) {
    earlier = read_sweep_points(read_text(options.baseline), options.baseline);
  }
  report.sweep = measure(options);
  report.growth = growth_of(report.sweep);
  if (report.budget) report.verdicts = judge_budget(report.sweep, *report.budget);
  if (!options.baseline.empty()) report.changes = compare_sweeps(earlier, report.sweep);

  const std::string json = sweep_json(report);
  if (!options.csv.empty()) write_text(options.csv, sweep_csv(report));
  if (!options.html.empty()) write_text(options.html, sweep_page(json));
  if (options.json) {
    std::cout << json;
  } else {
    print_sweep(std::cout, nlohmann::ordered_json::parse(json));
  }
  return finding(report);
}

}  // namespace

Command add_sweep(CLI::App& app) {
  CLI::App* command = app.add_subcommand(
      "sweep", "Measure models over image sizes: growth, limits, what fits a budget");
  auto options = std::make_shared<SweepCommandOptions>();
  command
      ->add_option("MODEL", options->models,
                   "Bundles, or names of architectures (import --list), which run untrained")
      ->required();
  command
      ->add_option("--sizes", options->sizes,
                   "Sides of square images, FIRST:LAST:STEP or a list (default: 96:384:32)")
      ->type_name("SIZES");
  command
      ->add_option("--threads", options->threads,
                   "Numbers of threads, by commas (default: the CPUs this process may use)")
      ->type_name("N,...");
  command->add_option("--repeat", options->repeat, "Runs of every model at every size, in turns")
      ->check(CLI::Range(1, 100000))
      ->capture_default_str()
      ->type_name("N");
  command->add_option("--cpus", options->cpus, "Stay on these CPUs, 0,2-3 say")->type_name("LIST");
  command->add_option("--accuracy", options->accuracy, "As for time: exact or fast (default)")
      ->check(CLI::IsMember({"exact", "fast"}))
      ->type_name("exact|fast");
  command
      ->add_option("--budget", options->budget,
                   "The largest size that keeps to a time, 50ms@p99 say; exit code 1 when no\n"
                   "model has one")
      ->type_name("TIME");
  command->add_option("--memory", options->memory, "The same for resident memory, 64MiB say")
      ->type_name("BYTES");
  command
      ->add_option("--baseline", options->baseline,
                   "Compare with the JSON of an earlier sweep; exit code 1 when a model became\n"
                   "slower by more than the noise")
      ->type_name("FILE");
  command->add_option("--csv", options->csv, "Also write a table of all figures")
      ->type_name("FILE");
  command->add_option("--html", options->html, "Also write a page with charts")->type_name("FILE");
  command->add_flag("--json", options->json, "Print one JSON object");
  // How sweep measures the memory of a process that does nothing else.
  command->add_flag("--resident", options->resident)->group("");
  command->footer(
      "Example: leadsman sweep examples/buttons/bundles/conv examples/buttons/bundles/vit \\\n"
      "             --sizes 64:192:32 --threads 1 --budget 5ms@p99 --html sweep.html");
  return [options] { return run(*options); };
}

}  // namespace leadsman::cli
