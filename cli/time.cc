#include <algorithm>
#include <chrono>
#include <iostream>

#include <nlohmann/json.hpp>

#include "commands.h"
#include "leadsman/error.h"
#include "leadsman/runner.h"
#include "leadsman/sweep.h"
#include "leadsman/tensor_file.h"
#include "options.h"
#include "profile_text.h"
#include "text.h"

namespace leadsman::cli {
namespace {

struct TimeOptions {
  ModelOptions model;
  std::int64_t batch = 1;
  std::int64_t runs = 50;
  std::string tensor;
  std::string out;
  bool profile = false;
  bool turns = false;
  bool json = false;
};

using Json = nlohmann::ordered_json;

class Timer {
 public:
  explicit Timer(const TimeOptions& options)
      : options_(options), model_(load_bundle(options.model.bundle)) {
    PlanOptions plan = options.model.plan_options(model_);
    if (options.tensor.empty()) {
      const auto [height, width] = options.model.parsed_size();
      plan.input_shapes = input_shapes_at(model_.graph, options.batch, height, width);
      for (const Shape& shape : plan.input_shapes) inputs_.push_back(filler(shape));
    } else {
      inputs_.push_back(TensorFile::open(options.tensor).read_only());
      plan.input_shapes = {inputs_[0].shape()};
    }
    plan_ = Plan::make(model_.graph, model_.weights, plan);
    runner_.emplace(plan_);
    runner_->run(inputs_);  // touches all memory once
    peak_ = measure_peak(plan_->threads());
  }

  int run() {
    if (!options_.out.empty()) save_outputs();
    if (options_.turns) {
      take_turns();
      return 0;
    }
    if (options_.profile) {
      print_profiled();
      return 0;
    }
    std::vector<double> seconds = measure(options_.runs);
    std::ranges::sort(seconds);
    print(seconds.front(), seconds[seconds.size() / 2]);
    return 0;
  }

 private:
  std::vector<double> measure(std::int64_t runs) {
    std::vector<double> seconds;
    for (std::int64_t i = 0; i < runs; ++i) {
      const auto begin = std::chrono::steady_clock::now();
      runner_->run(inputs_);
      const std::chrono::duration<double> passed = std::chrono::steady_clock::now() - begin;
      seconds.push_back(passed.count());
    }
    return seconds;
  }

  Json facts() const {
    Json document = {{"bundle", options_.model.bundle}, {"inputs", Json::object()}};
    for (std::size_t i = 0; i < inputs_.size(); ++i) {
      const auto sizes = inputs_[i].shape().sizes();
      document["inputs"][plan_->input_names()[i]] =
          std::vector<std::int64_t>(sizes.begin(), sizes.end());
    }
    document["threads"] = plan_->threads();
    document["instruction_set"] = instruction_set();
    document["macs"] = plan_->macs();
    document["peak_gflops"] = peak_ * 1e-9;
    document["planned_peak_bytes"] = plan_->peak_bytes();
    return document;
  }

  double rate(double seconds) const { return 2.0 * static_cast<double>(plan_->macs()) / seconds; }

  void print(double best, double median) const {
    if (options_.json) {
      Json document = facts();
      document["runs"] = options_.runs;
      document["best_seconds"] = best;
      document["median_seconds"] = median;
      document["gflops"] = rate(median) * 1e-9;
      document["peak_fraction"] = rate(median) / peak_;
      std::cout << document.dump(2) << '\n';
      return;
    }
    using Align = Table::Align;
    Table table({{""},
                 {"ms", Align::kRight},
                 {"runs/s", Align::kRight},
                 {"GFLOP/s", Align::kRight},
                 {"of peak", Align::kRight}});
    const auto add = [&](const std::string& name, double seconds) {
      table.add({name, fixed(seconds * 1e3, 3), fixed(1.0 / seconds, 1),
                 fixed(rate(seconds) * 1e-9, 1), fixed(rate(seconds) / peak_, 2)});
    };
    add("best", best);
    add("median", median);
    table.print(std::cout);
    const auto sizes = inputs_[0].shape().sizes();
    std::cout << '\n'
              << counted(options_.runs, "run") << " of " << shape_text({sizes.begin(), sizes.end()})
              << ", " << counted(plan_->threads(), "thread") << ", " << instruction_set()
              << ", peak " << fixed(peak_ * 1e-9, 1) << " GFLOP/s\n";
  }

  void print_profiled() {
    runner_->enable_profile(true);
    measure(options_.runs);
    if (options_.json) {
      std::cout << profile_json(*plan_, runner_->profile(), peak_).dump(2) << '\n';
    } else {
      print_profile(std::cout, *plan_, runner_->profile(), peak_);
    }
  }

  // Another program sets the pace: it asks for some runs and gets their times.
  void take_turns() {
    std::cout << facts().dump() << std::endl;
    std::string line;
    while (std::getline(std::cin, line)) {
      char* end = nullptr;
      const long long runs = std::strtoll(line.c_str(), &end, 10);
      if (end == line.c_str() || *end != '\0' || runs < 1 || runs > 1000000) {
        throw_usage("--turns: '" + line + "' is not a number of runs from 1 to 1000000");
      }
      std::cout << Json{{"seconds", measure(runs)}}.dump() << std::endl;
    }
  }

  void save_outputs() const {
    NamedTensors outputs;
    for (std::size_t i = 0; i < plan_->output_names().size(); ++i) {
      outputs.emplace_back(plan_->output_names()[i], to_tensor(runner_->output(i)));
    }
    write_tensors(options_.out, outputs);
  }

  const TimeOptions& options_;
  Bundle model_;
  std::vector<Tensor> inputs_;
  std::shared_ptr<const Plan> plan_;
  std::optional<Runner> runner_;
  double peak_ = 0.0;
};

}  // namespace

Command add_time(CLI::App& app) {
  CLI::App* command = app.add_subcommand("time", "Measure how long a run takes, and which part");
  auto options = std::make_shared<TimeOptions>();
  options->model.add_to(*command);
  command->add_option("--batch", options->batch, "Pictures a run")
      ->check(CLI::Range(1, 65536))
      ->type_name("N");
  command->add_option("--runs", options->runs, "Runs, after one that does not count")
      ->check(CLI::Range(1, 1000000))
      ->type_name("N");
  command->add_option("--tensor", options->tensor, "A ready input [N,C,H,W]; else any numbers")
      ->type_name("FILE.npy");
  command->add_option("--out", options->out, "Save the outputs, by layer name")
      ->type_name("FILE.npz|.safetensors");
  CLI::Option* profile =
      command->add_flag("--profile", options->profile, "Time, work and rate of every step");
  command
      ->add_flag("--turns", options->turns,
                 "For programs that measure in turns: answers each line on stdin, a number of\n"
                 "runs, by a line of JSON with their seconds; a line of facts comes first")
      ->excludes(profile);
  command->add_flag("--json", options->json, "One JSON object");
  command->footer("Example: leadsman time examples/buttons/bundles/vit --threads 1 --profile");
  return [options] { return Timer(*options).run(); };
}

}  // namespace leadsman::cli
