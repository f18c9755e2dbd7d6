// Measures models over image sizes and numbers of threads, in turns, and draws conclusions: growth
// laws, the largest size within a budget, the difference to an earlier sweep.
#pragma once

#include <cstdint>
#include <functional>
#include <map>
#include <optional>
#include <string>
#include <vector>

#include "leadsman/board.h"
#include "leadsman/growth.h"
#include "leadsman/plan.h"

namespace leadsman {

struct SweepModel {
  std::string name;
  Graph graph;
  WeightMap weights;
};

/// Resident memory of a process of its own that loads one model and runs it (VmHWM of
/// /proc/PID/status): once it has run a model of next to nothing, and at most.
struct ResidentMemory {
  std::int64_t base_bytes = 0;
  std::int64_t peak_bytes = 0;
};

struct SweepOptions {
  std::vector<std::int64_t> sizes;  ///< sides of square images
  std::vector<int> threads;
  int rounds = 20;  ///< timed runs of every model at every size
  Accuracy accuracy = Accuracy::kFast;
  /// Asked between runs; true ends the sweep, which keeps all sizes that are complete.
  std::function<bool()> stop = [] { return false; };
  /// Told the share of the work that is done, reckoned by the images' areas.
  std::function<void(double share)> progress = [](double) {};
  /// Measures memory in a process of its own; absent figures are left out.
  std::function<std::optional<ResidentMemory>(const SweepModel&, std::int64_t size, int threads)>
      resident = [](const SweepModel&, std::int64_t, int) { return std::nullopt; };
};

struct SweepSample {
  double seconds = 0.0;
  bool busy = false;       ///< threads waited for processors that others had, over 2 % of the time
  bool throttled = false;  ///< board.h, throttled()
};

/// What the steps of one family of operators take together in a run.
struct FamilyWork {
  std::string family;
  double seconds = 0.0;  ///< sum of each step's best
  std::int64_t macs = 0;
  std::int64_t bytes = 0;  ///< inputs, outputs and weights of its steps, each once a step
};

/// One model at one size with one number of threads.
struct SweepPoint {
  std::string model;
  std::int64_t size = 0;
  int threads = 0;
  std::string failure;      ///< why this size cannot run; all below is then empty
  std::int64_t tokens = 0;  ///< longest sequence that attends to itself; 0 without attention
  std::int64_t macs = 0;
  std::int64_t predicted_bytes = 0;  ///< memory by the plan: all weights, copies, arena, workspace
  std::optional<ResidentMemory> resident;
  std::vector<SweepSample> samples;  ///< in the order taken
  std::string unstable;              ///< statistics.h, unstable_reason(), and of warming up
  std::vector<FamilyWork> families;  ///< the longest first
  BoardState state;                  ///< after its last run

  std::vector<double> seconds() const;
  double seconds_at(double q) const;  ///< quantile of the samples
  std::int64_t bytes() const;         ///< moved by all families
  /// Resident memory that the plan foresees: the process's base and predicted_bytes.
  std::int64_t foreseen_bytes() const;
  /// Measured when it was, else foreseen.
  std::int64_t memory_bytes() const;
};

struct Sweep {
  Board board;
  std::vector<BoardLimits> limits;  ///< for each number of threads
  std::vector<SweepPoint> points;   ///< by size, then threads, then model
  int rounds = 0;
  bool complete = true;  ///< false when it was stopped

  const BoardLimits& limits_of(int threads) const;
};

/// At each size all models warm up until their times agree (statistics.h), then take turns: one run
/// each, `rounds` times over, so that what changes on the machine changes for all. Profiled runs
/// follow, which do not count. A size that a model cannot take becomes a point with a failure.
/// Throws Error(kUsage) for options that are empty or not positive, Error(kMemory).
Sweep run_sweep(const std::vector<SweepModel>& models, const SweepOptions& options);

/// "convolution", "depthwise", "matrix product", "attention", "normalisation", "activation",
/// "pooling" or "others".
std::string operator_family(const std::string& operator_name, bool depthwise);
/// Work of each family in one run of `plan`, without times: those of StepSummary in order.
std::vector<FamilyWork> step_work(const Graph& graph, const WeightMap& weights, const Plan& plan);

/// Values in [-1, 1) without a pattern: what they are does not matter to the time.
Tensor filler(const Shape& shape);

/// Growth of one model's median with size.
struct Growth {
  std::string model;
  int threads = 0;
  PowerLaw time;  ///< seconds against side, of all sizes
  double macs_exponent = 0.0;
  /// The largest size, predicted from the others alone (of 3 or more).
  struct HeldOut {
    std::int64_t size = 0;
    Prediction predicted;
    double measured = 0.0;
  };
  std::optional<HeldOut> held_out;
  struct Tokens {
    TokenLaw law;
    double tenth_size = 0.0;  ///< side at which the quadratic part is a tenth of the time
    double half_size = 0.0;
  };
  std::optional<Tokens> tokens;  ///< with attention over the whole image only
};
/// Of every model and number of threads with 3 sizes or more.
std::vector<Growth> growth_of(const Sweep& sweep);

struct Budget {
  std::optional<double> seconds;
  double at = 0.99;  ///< the quantile that must keep to `seconds`
  std::optional<double> bytes;
};
/// "50ms@p99", "0.2s@p50", "800us" (p99). Throws Error(kUsage).
void parse_time_budget(const std::string& text, Budget& budget);
/// "64MiB", "1GiB", "500MB", "65536" (bytes). Throws Error(kUsage).
void parse_memory_budget(const std::string& text, Budget& budget);

struct BudgetVerdict {
  std::string model;
  int threads = 0;
  std::int64_t largest = 0;  ///< the largest size that fits; 0: none
  std::int64_t next = 0;     ///< the size above it, which fails; 0: none was measured
  std::string reason;        ///< why it fails
};
std::vector<BudgetVerdict> judge_budget(const Sweep& sweep, const Budget& budget);

/// An earlier time of the same model, size and threads against today's.
struct Change {
  std::string model;
  std::int64_t size = 0;
  int threads = 0;
  double ratio = 0.0;  ///< of medians, today's over the earlier one
  Interval interval;   ///< bootstrap; 95 % for all comparisons together (Bonferroni)
  bool slower() const { return interval.low > 1.0; }
  bool faster() const { return interval.high < 1.0; }
};
/// Throws Error(kUsage) when nothing of the earlier points was measured again.
std::vector<Change> compare_sweeps(const std::vector<SweepPoint>& earlier, const Sweep& today);

}  // namespace leadsman
