// The library in a program of one's own: one plan shared by two threads, a hook at one layer, the
// best label and where the time goes.
//
//   embed BUNDLE PICTURE [LAYER]
#include <algorithm>
#include <cmath>
#include <cstdio>
#include <future>
#include <memory>
#include <string>
#include <vector>

#include <leadsman/bundle.h>
#include <leadsman/error.h>
#include <leadsman/plan.h>
#include <leadsman/preprocess.h>
#include <leadsman/runner.h>

namespace {

/// Share of the softmax that the best class has, and its label.
std::string best_label(const leadsman::Bundle& bundle, const leadsman::ConstTensorView& scores) {
  const std::int64_t classes = scores.shape[1];
  const float* best = std::max_element(scores.data, scores.data + classes);
  double sum = 0.0;
  for (std::int64_t k = 0; k < classes; ++k) sum += std::exp(double{scores.data[k]} - *best);
  const auto index = static_cast<std::size_t>(best - scores.data);
  const std::string label =
      index < bundle.labels.size() ? bundle.labels[index] : "class " + std::to_string(index);
  char share[32];
  std::snprintf(share, sizeof share, "%.1f%% ", 100.0 / sum);
  return share + label;
}

/// The step that took most of the time.
std::string slowest_step(const leadsman::Runner& runner) {
  const std::vector<leadsman::PartTime>& times = runner.profile().steps;
  const auto slowest = std::ranges::max_element(times, {}, &leadsman::PartTime::total_seconds);
  const leadsman::StepSummary& step =
      runner.plan().steps()[static_cast<std::size_t>(slowest - times.begin())];
  char text[128];
  std::snprintf(text, sizeof text, "%.1f of %.1f ms in %s (%s)", 1e3 * slowest->best_seconds,
                1e3 * runner.profile().whole.best_seconds, step.layers.front().c_str(),
                step.strategy.c_str());
  return text;
}

void run(const std::string& bundle_path, const std::string& picture, const std::string& wanted) {
  const leadsman::Bundle bundle = leadsman::load_bundle(bundle_path);
  if (!bundle.preprocess) leadsman::throw_usage("the bundle does not say how to prepare a picture");
  const leadsman::Tensor input = leadsman::preprocess(
      leadsman::read_picture(picture, bundle.preprocess->orientation), *bundle.preprocess);

  const std::string layer = wanted.empty() ? bundle.graph.layers.front().name : wanted;
  const auto plan =
      leadsman::Plan::make(bundle.graph, bundle.weights,
                           {.input_shapes = {input.shape()}, .threads = 1, .observe = {layer}});

  // A plan never changes; each thread has a runner, which owns the memory of a run.
  const auto work = [&]() -> std::string {
    leadsman::Runner runner(plan);
    std::string seen;
    runner.add_hook(layer, [&](const leadsman::HookedOutput& output) {
      const leadsman::Tensor values = output.read();
      const auto [low, high] = std::ranges::minmax(values.values());
      seen = output.layer() + " " + output.shape().to_string() + " from " + std::to_string(low) +
             " to " + std::to_string(high);
    });
    runner.enable_profile(true);
    for (int i = 0; i < 3; ++i) runner.run(input);
    return best_label(bundle, runner.output()) + "\n  saw " + seen + "\n  " + slowest_step(runner);
  };
  std::future<std::string> other = std::async(std::launch::async, work);
  std::printf("thread 0: %s\n", work().c_str());
  std::printf("thread 1: %s\n", other.get().c_str());
}

}  // namespace

int main(int argc, char** argv) {
  if (argc < 3 || argc > 4) {
    std::fprintf(stderr, "usage: embed BUNDLE PICTURE [LAYER]\n");
    return 2;
  }
  try {
    run(argv[1], argv[2], argc == 4 ? argv[3] : "");
    return 0;
  } catch (const leadsman::Error& error) {
    std::fprintf(stderr, "embed: %s\n", error.what());
    return static_cast<int>(error.kind());
  }
}
