#include "leadsman/sweep.h"

#include <algorithm>
#include <chrono>

#include "leadsman/error.h"
#include "leadsman/runner.h"

namespace leadsman {
namespace {

using Clock = std::chrono::steady_clock;

double timed_run(Runner& runner, const std::vector<Tensor>& inputs) {
  const auto begin = Clock::now();
  runner.run(inputs);
  return std::chrono::duration<double>(Clock::now() - begin).count();
}

// One model, planned and ready to run.
class Contender {
 public:
  Contender(const SweepModel& model, const SweepOptions& options, std::int64_t size, int threads)
      : model_(model) {
    point.model = model.name;
    point.size = size;
    point.threads = threads;
    try {
      PlanOptions plan;
      plan.input_shapes = input_shapes_at(model.graph, 1, size, size);
      plan.threads = threads;
      plan.accuracy = options.accuracy;
      runner_.emplace(Plan::make(model.graph, model.weights, plan));
    } catch (const Error& error) {
      if (error.kind() == ErrorKind::kMemory) throw;
      point.failure = error.what();
      return;
    }
    for (const Shape& shape : plan().input_shapes()) inputs_.push_back(filler(shape));
    describe();
  }

  bool ready() const { return runner_.has_value(); }

  void warm_up(const SweepOptions& options) {
    constexpr std::size_t kMostRuns = 30;
    constexpr double kLongest = 4.0;  // seconds
    std::vector<double> seconds;
    double spent = 0.0;
    while (!warmed_up(seconds) && !options.stop()) {
      if (seconds.size() == kMostRuns || (spent > kLongest && seconds.size() >= 3)) {
        point.unstable = "it did not warm up";
        return;
      }
      seconds.push_back(timed_run(*runner_, inputs_));
      spent += seconds.back();
    }
  }

  void take_turn() {
    const BoardState before = read_board_state();
    const auto waited = waited_nanoseconds();
    SweepSample sample;
    sample.seconds = timed_run(*runner_, inputs_);
    if (const auto now = waited_nanoseconds(); now && waited) {
      sample.busy = 1e-9 * static_cast<double>(*now - *waited) > 0.02 * sample.seconds;
    }
    point.state = read_board_state();
    sample.throttled = throttled(before, point.state);
    point.samples.push_back(sample);
  }

  void finish() {
    const std::vector<double> seconds = point.seconds();
    if (point.unstable.empty()) point.unstable = unstable_reason(seconds);
    constexpr int kProfiledRuns = 5;
    runner_->enable_profile(true);
    for (int i = 0; i < kProfiledRuns; ++i) runner_->run(inputs_);
    const Profile& profile = runner_->profile();
    std::vector<FamilyWork> steps = step_work(model_.graph, model_.weights, plan());
    for (std::size_t i = 0; i < steps.size(); ++i) {
      if (profile.steps[i].runs == 0) continue;  // a view moves nothing
      steps[i].seconds = profile.steps[i].best_seconds;
      add(steps[i]);
    }
    add({"others", profile.input.best_seconds + profile.plan.best_seconds, 0, 0});
    std::ranges::sort(point.families, std::greater{}, &FamilyWork::seconds);
  }

  SweepPoint point;

 private:
  const Plan& plan() const { return runner_->plan(); }

  void describe() {
    point.macs = plan().macs();
    for (const LayerSummary& layer : plan().layers()) {
      if (layer.operator_name == "attention" && layer.shape.rank() == 3) {
        point.tokens = std::max(point.tokens, layer.shape[1]);
      }
    }
    std::int64_t bytes = 0;
    for (const auto& [name, tensor] : model_.weights) bytes += 4 * tensor.elements();
    for (const Tensor& input : inputs_) bytes += 4 * input.elements();
    point.predicted_bytes =
        bytes + static_cast<std::int64_t>(plan().packed_bytes() + plan().arena_bytes() +
                                          plan().workspace_bytes());
  }

  void add(const FamilyWork& work) {
    const auto found = std::ranges::find(point.families, work.family, &FamilyWork::family);
    if (found == point.families.end()) {
      point.families.push_back(work);
      return;
    }
    found->seconds += work.seconds;
    found->macs += work.macs;
    found->bytes += work.bytes;
  }

  const SweepModel& model_;
  std::optional<Runner> runner_;
  std::vector<Tensor> inputs_;
};

void check(const std::vector<SweepModel>& models, const SweepOptions& options) {
  if (models.empty() || options.sizes.empty() || options.threads.empty()) {
    throw_usage("a sweep needs a model, a size and a number of threads");
  }
  const auto positive = [](auto value) { return value > 0; };
  if (options.rounds < 1 || !std::ranges::all_of(options.sizes, positive) ||
      !std::ranges::all_of(options.threads, positive)) {
    throw_usage("sizes, threads and rounds of a sweep are 1 or more");
  }
}

// All models at one size with one number of threads; nothing of it is kept when it is stopped.
std::vector<SweepPoint> measure_together(const std::vector<SweepModel>& models,
                                         const SweepOptions& options, std::int64_t size,
                                         int threads) {
  std::vector<Contender> contenders;
  contenders.reserve(models.size());
  for (const SweepModel& model : models) contenders.emplace_back(model, options, size, threads);
  for (Contender& contender : contenders) {
    if (contender.ready()) contender.warm_up(options);
  }
  for (int round = 0; round < options.rounds; ++round) {
    for (Contender& contender : contenders) {
      if (options.stop()) return {};
      if (contender.ready()) contender.take_turn();
    }
  }
  std::vector<SweepPoint> points;
  for (std::size_t i = 0; i < models.size(); ++i) {
    if (options.stop()) return {};
    if (contenders[i].ready()) {
      contenders[i].finish();
      contenders[i].point.resident = options.resident(models[i], size, threads);
    }
    points.push_back(std::move(contenders[i].point));
  }
  return options.stop() ? std::vector<SweepPoint>{} : points;
}

}  // namespace

std::vector<double> SweepPoint::seconds() const {
  std::vector<double> all;
  for (const SweepSample& sample : samples) all.push_back(sample.seconds);
  return all;
}

double SweepPoint::seconds_at(double q) const {
  return quantile(seconds(), q);
}

std::int64_t SweepPoint::bytes() const {
  std::int64_t sum = 0;
  for (const FamilyWork& work : families) sum += work.bytes;
  return sum;
}

std::int64_t SweepPoint::foreseen_bytes() const {
  return predicted_bytes + (resident ? resident->base_bytes : 0);
}

std::int64_t SweepPoint::memory_bytes() const {
  return resident ? resident->peak_bytes : foreseen_bytes();
}

const BoardLimits& Sweep::limits_of(int threads) const {
  const auto found = std::ranges::find(limits, threads, &BoardLimits::threads);
  if (found == limits.end()) throw_usage("no limits were measured for that many threads");
  return *found;
}

Tensor filler(const Shape& shape) {
  Tensor tensor(shape);
  std::uint32_t state = 1;
  for (std::int64_t i = 0; i < shape.elements(); ++i) {
    state = state * 1664525U + 1013904223U;  // Numerical Recipes' generator
    tensor.mutable_data()[i] = static_cast<float>(state >> 8) * 0x1p-23F - 1.0F;
  }
  return tensor;
}

Sweep run_sweep(const std::vector<SweepModel>& models, const SweepOptions& options) {
  check(models, options);
  Sweep sweep;
  sweep.board = read_board();
  sweep.rounds = options.rounds;
  double total = 0.0;
  for (const std::int64_t size : options.sizes) total += static_cast<double>(size * size);
  double done = 0.0;
  options.progress(0.0);
  for (const int threads : options.threads) {
    sweep.limits.push_back(measure_limits(sweep.board, threads));
  }
  for (const std::int64_t size : options.sizes) {
    for (const int threads : options.threads) {
      std::vector<SweepPoint> points;
      if (!options.stop()) points = measure_together(models, options, size, threads);
      if (points.empty()) {
        sweep.complete = false;
        return sweep;
      }
      for (SweepPoint& point : points) sweep.points.push_back(std::move(point));
    }
    done += static_cast<double>(size * size);
    options.progress(done / total);
  }
  return sweep;
}

}  // namespace leadsman
