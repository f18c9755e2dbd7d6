#include <algorithm>
#include <cmath>
#include <iostream>
#include <numeric>

#include <nlohmann/json.hpp>

#include "commands.h"
#include "inputs_ahead.h"
#include "leadsman/error.h"
#include "leadsman/runner.h"
#include "leadsman/tensor_file.h"
#include "options.h"
#include "pictures.h"
#include "profile_text.h"
#include "text.h"

namespace leadsman::cli {
namespace {

struct ClassifyOptions {
  ModelOptions model;
  std::vector<std::string> pictures;
  std::string tensor;
  int top = 3;
  bool profile = false;
  bool json = false;
};

using Json = nlohmann::ordered_json;

struct Answer {
  std::size_t index;
  double probability;
};

// Softmax in double, unless the graph ends in one.
std::vector<double> probabilities(const Graph& graph, std::span<const float> scores) {
  std::vector<double> values(scores.begin(), scores.end());
  const Layer* last = graph.find_layer(graph.outputs.front());
  if (last != nullptr && last->operator_name == "softmax") return values;
  const double largest = *std::ranges::max_element(values);
  double sum = 0.0;
  for (double& value : values) sum += value = std::exp(value - largest);
  for (double& value : values) value /= sum;
  return values;
}

std::vector<Answer> best_answers(const std::vector<double>& probability, int top) {
  std::vector<std::size_t> order(probability.size());
  std::iota(order.begin(), order.end(), std::size_t{0});
  const auto count = std::min(order.size(), static_cast<std::size_t>(top));
  std::ranges::partial_sort(
      order, order.begin() + static_cast<std::ptrdiff_t>(count), [&](std::size_t a, std::size_t b) {
        return probability[a] != probability[b] ? probability[a] > probability[b] : a < b;
      });
  std::vector<Answer> answers;
  for (std::size_t i = 0; i < count; ++i) answers.push_back({order[i], probability[order[i]]});
  return answers;
}

class Classifier {
 public:
  explicit Classifier(const ClassifyOptions& options)
      : options_(options), model_(load_bundle(options.model.bundle)) {}

  int run() {
    if (!options_.tensor.empty()) {
      if (!options_.pictures.empty()) throw_usage("give pictures or --tensor, not both");
      classify_tensor();
      print_profile_if_asked();
      return 0;
    }
    if (options_.pictures.empty()) throw_usage("give at least one picture, folder, or -");
    const Preprocess settings = preprocessing(model_, options_.model);
    const std::vector<std::string> pictures = expand_pictures(options_.pictures);
    for (const std::string& picture : pictures) {
      width_ = std::max(width_, std::min<std::size_t>(picture.size(), 48));
    }
    const int threads = options_.model.plan_options(model_).threads;
    InputsAhead inputs(pictures, settings, threads > 0 ? threads : available_cpus());
    Progress progress("picture");
    std::size_t bad = 0;
    for (std::size_t i = 0; i < pictures.size(); ++i) {
      if (pictures.size() > 1) progress.show(i + 1, pictures.size());
      Tensor input;
      try {
        input = inputs.next();
      } catch (const Error& error) {
        if (error.kind() != ErrorKind::kInput) throw;
        progress.clear();
        report_bad(pictures[i], error.what());
        ++bad;
        continue;
      }
      run_once(input);
      progress.clear();
      print(pictures[i], 0);
    }
    print_profile_if_asked();
    if (bad == 0) return 0;
    std::cerr << "leadsman: " << bad << " of " << pictures.size()
              << " pictures could not be read\n";
    return static_cast<int>(ErrorKind::kInput);
  }

 private:
  void classify_tensor() {
    const Tensor input = TensorFile::open(options_.tensor).read_only();
    run_once(input);
    width_ = options_.tensor.size() + 6;
    const std::int64_t count = runner_->output().shape[0];
    for (std::int64_t n = 0; n < count; ++n) {
      print(count == 1 ? options_.tensor : options_.tensor + "[" + std::to_string(n) + "]", n);
    }
  }

  // All pictures of one bundle have one size: planned once.
  void run_once(const Tensor& input) {
    if (runner_ == nullptr) {
      PlanOptions plan = options_.model.plan_options(model_);
      plan.input_shapes = {input.shape()};
      runner_ = std::make_unique<Runner>(Plan::make(model_.graph, model_.weights, plan));
      const Shape& scores = runner_->output().shape;
      if (scores.rank() != 2) {
        throw_input(options_.model.bundle + ": output '" + model_.graph.outputs.front() +
                    "' has shape " + scores.to_string() + ", a classifier gives [N, classes]");
      }
      if (!model_.labels.empty() && static_cast<std::int64_t>(model_.labels.size()) != scores[1]) {
        throw_input(options_.model.bundle + ": " + std::to_string(model_.labels.size()) +
                    " labels for " + std::to_string(scores[1]) + " classes");
      }
      if (options_.profile) {
        runner_->run(input);  // the first touches memory that the others find warm
        runner_->enable_profile(true);
      }
    }
    runner_->run(input);
  }

  void print_profile_if_asked() const {
    if (!options_.profile || runner_ == nullptr) return;
    const double peak = measure_peak(runner_->plan().threads());
    if (options_.json) {
      const Json line = {{"profile", profile_json(runner_->plan(), runner_->profile(), peak)}};
      std::cout << line.dump() << std::endl;
    } else {
      std::cout << '\n';
      print_profile(std::cout, runner_->plan(), runner_->profile(), peak);
    }
  }

  void print(const std::string& picture, std::int64_t n) const {
    const ConstTensorView scores = runner_->output();
    const auto classes = static_cast<std::size_t>(scores.shape[1]);
    const std::span<const float> row(scores.data + n * scores.shape[1], classes);
    if (!std::ranges::all_of(row, [](float x) { return std::isfinite(x); })) {
      throw_input(picture + ": the model's output is not finite");
    }
    const std::vector<Answer> answers =
        best_answers(probabilities(model_.graph, row), options_.top);
    if (options_.json) {
      Json line = {{"picture", picture}, {"top", Json::array()}};
      for (const Answer& answer : answers) {
        line["top"].push_back({{"label", label(answer.index)},
                               {"index", answer.index},
                               {"probability", answer.probability}});
      }
      std::cout << line.dump(-1, ' ', false, Json::error_handler_t::replace) << std::endl;
      return;
    }
    std::string text = shortened(picture, width_);
    text += std::string(width_ - text.size(), ' ');
    for (std::size_t i = 0; i < answers.size(); ++i) {
      std::array<char, 32> share{};
      std::snprintf(share.data(), share.size(), "%5.1f%%", 100.0 * answers[i].probability);
      const std::string cell = "  " + std::string(share.data()) + " " + label(answers[i].index);
      text += i == 0 ? emphasize(cell) : cell;
    }
    std::cout << text << std::endl;
  }

  void report_bad(const std::string& picture, const std::string& reason) const {
    if (options_.json) {
      const Json line = {{"picture", picture}, {"error", reason}};
      std::cout << line.dump(-1, ' ', false, Json::error_handler_t::replace) << std::endl;
    } else {
      std::cerr << "leadsman: skipped: " << reason << '\n';
    }
  }

  std::string label(std::size_t index) const {
    return index < model_.labels.size() ? model_.labels[index] : "class " + std::to_string(index);
  }

  const ClassifyOptions& options_;
  Bundle model_;
  std::unique_ptr<Runner> runner_;
  std::size_t width_ = 0;
};

}  // namespace

Command add_classify(CLI::App& app) {
  CLI::App* command = app.add_subcommand("classify", "Label pictures");
  auto options = std::make_shared<ClassifyOptions>();
  options->model.add_to(*command);
  command->add_option("PICTURE", options->pictures,
                      "JPEG, PNG, BMP or PNM files, folders of them, or - for a list on stdin");
  command->add_option("--tensor", options->tensor, "A ready input [N,C,H,W] instead of pictures")
      ->type_name("FILE.npy");
  command->add_option("--top", options->top, "Labels a picture")
      ->check(CLI::Range(1, 1000000))
      ->type_name("K");
  command->add_flag("--profile", options->profile,
                    "Then show the time, work and rate of every step");
  command->add_flag("--json", options->json, "One JSON object a line");
  command->footer(
      "Example: leadsman classify examples/buttons/bundles/conv examples/buttons/pictures/odd\n"
      "A picture that cannot be read is reported and skipped; the exit code is then 3.");
  return [options] { return Classifier(*options).run(); };
}

}  // namespace leadsman::cli
