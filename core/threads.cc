#include "core/threads.h"

#include <algorithm>
#include <atomic>
#include <memory>
#include <mutex>
#include <system_error>
#include <thread>
#include <vector>

#include <sched.h>

#include "core/cpu_quota.h"

namespace leadsman {

int available_cpus() {
  int count = static_cast<int>(std::thread::hardware_concurrency());
  cpu_set_t set;
  CPU_ZERO(&set);
  if (sched_getaffinity(0, sizeof(set), &set) == 0) count = CPU_COUNT(&set);
  static const std::optional<double> quota = internal::cpu_quota();
  if (quota) count = std::min(count, static_cast<int>(std::min(*quota, 65536.0) + 0.5));
  return std::max(1, count);
}

namespace {

using Clock = std::chrono::steady_clock;
using std::chrono::nanoseconds;

void pause_briefly() {
#if defined(__x86_64__)
  __builtin_ia32_pause();
#elif defined(__aarch64__)
  asm volatile("yield");
#endif
}

// Waits until ready(), spinning for as long as bound() says; false when the time was over first.
template <typename Bound, typename Ready>
bool spin(const Bound& bound, const Ready& ready) {
  constexpr nanoseconds kAlone = std::chrono::microseconds(20);  // from then on, let others run
  constexpr int kPauses = 32;                                    // about a microsecond
  if (ready()) return true;
  const Clock::time_point begin = Clock::now();
  nanoseconds passed{0};
  while (passed < bound()) {
    for (int i = 0; i < kPauses; ++i) {
      pause_briefly();
      if (ready()) return true;
    }
    passed = Clock::now() - begin;
    if (passed > kAlone) sched_yield();
  }
  return false;
}

// Where one thread sleeps until another wakes it.
class Bed {
 public:
  // Sleeps unless ready() holds by now; may return early. What makes it ready must be done before
  // wake() is called, in the one order of all sequentially consistent accesses.
  template <typename Ready>
  void sleep_unless(const Ready& ready) {
    asleep_.store(1);
    if (!ready()) asleep_.wait(1);
    asleep_.store(0);
  }
  void wake() {
    if (asleep_.load() == 0) return;
    asleep_.store(0);
    asleep_.notify_one();
  }

 private:
  std::atomic<int> asleep_{0};
};

// True in helpers, and in a caller while it works on tasks.
thread_local bool inside_call = false;

class Team {
 public:
  Team() = default;
  ~Team() {
    stopping_.store(true);
    for (const auto& helper : helpers_) helper->bed.wake();
    for (const auto& helper : helpers_) helper->thread.join();
  }
  Team(const Team&) = delete;
  Team& operator=(const Team&) = delete;

  void run(int workers, std::int64_t tasks, internal::TaskFunction function, const void* body) {
    hire(workers);
    // No helper is inside, and none can enter before the gate opens: the job is ours to write.
    function_ = function;
    body_ = body;
    tasks_ = tasks;
    next_.store(0, std::memory_order_relaxed);
    const auto call = static_cast<std::uint64_t>(++calls_);
    gate_.store(call << 32 | static_cast<std::uint64_t>(workers) << 16);
    wake(workers);
    inside_call = true;
    work(0);
    inside_call = false;
    gate_.fetch_and(~kWorkers);  // closed: only those inside are waited for
    const auto left = [this] { return (gate_.load() & kInside) == 0; };
    const auto bound = [] { return nanoseconds(std::chrono::microseconds(50)); };
    while (!spin(bound, left)) caller_.sleep_unless(left);
  }

  void keep_awake(int threads, nanoseconds spin) {
    hire(threads);
    static const int cpus = available_cpus();
    if (threads > cpus || spin <= nanoseconds(0)) return;
    spin_ns_.store(spin.count());
    wake(threads);
  }
  void let_sleep() { spin_ns_.store(0); }

 private:
  // The gate: number of the call, workers it wants (0: closed), helpers inside.
  static constexpr std::uint64_t kInside = 0xffff;
  static constexpr std::uint64_t kWorkers = 0xffff0000;
  static std::uint64_t workers_of(std::uint64_t gate) { return (gate & kWorkers) >> 16; }

  struct alignas(64) Helper {
    Bed bed;
    std::thread thread;
  };

  // As many helpers as the system lets us have; the work gets done without them, too.
  void hire(int workers) {
    while (static_cast<int>(helpers_.size()) < workers - 1) {
      auto helper = std::make_unique<Helper>();
      const auto worker = static_cast<int>(helpers_.size()) + 1;
      try {
        helper->thread = std::thread([this, worker, bed = &helper->bed] { help(worker, *bed); });
      } catch (const std::system_error&) {
        return;
      }
      helpers_.push_back(std::move(helper));
    }
  }

  void wake(int workers) {
    const auto count = std::min(helpers_.size(), static_cast<std::size_t>(workers - 1));
    for (std::size_t i = 0; i < count; ++i) helpers_[i]->bed.wake();
  }

  void work(int worker) {
    while (true) {
      const std::int64_t task = next_.fetch_add(1, std::memory_order_relaxed);
      if (task >= tasks_) return;
      function_(body_, task, worker);
    }
  }

  void help(int worker, Bed& bed) {
    inside_call = true;
    std::uint64_t last_call = 0;
    const auto wanted = [&](std::uint64_t gate) {
      return gate >> 32 != last_call && workers_of(gate) > static_cast<std::uint64_t>(worker);
    };
    const auto ready = [&] { return wanted(gate_.load()) || stopping_.load(); };
    const auto bound = [this] { return nanoseconds(spin_ns_.load(std::memory_order_relaxed)); };
    while (true) {
      if (!spin(bound, ready)) bed.sleep_unless(ready);
      if (stopping_.load()) return;
      std::uint64_t gate = gate_.load();
      while (wanted(gate)) {
        if (!gate_.compare_exchange_weak(gate, gate + 1)) continue;
        last_call = gate >> 32;
        work(worker);
        // The last one out tells the caller, who may have gone to sleep.
        if ((gate_.fetch_sub(1) & kInside) == 1) caller_.wake();
      }
    }
  }

  std::vector<std::unique_ptr<Helper>> helpers_;
  std::uint32_t calls_ = 0;
  internal::TaskFunction function_ = nullptr;
  const void* body_ = nullptr;
  std::int64_t tasks_ = 0;
  std::atomic<bool> stopping_{false};
  std::atomic<std::int64_t> spin_ns_{0};
  Bed caller_;
  alignas(64) std::atomic<std::uint64_t> gate_{0};
  alignas(64) std::atomic<std::int64_t> next_{0};
};

// Teams that nobody uses at the moment.
class Teams {
 public:
  std::unique_ptr<Team> borrow() {
    const std::lock_guard<std::mutex> lock(mutex_);
    if (idle_.empty()) {
      idle_.reserve(++count_);  // so that giving back never allocates
      return std::make_unique<Team>();
    }
    std::unique_ptr<Team> team = std::move(idle_.back());
    idle_.pop_back();
    return team;
  }
  void give_back(std::unique_ptr<Team> team) {
    const std::lock_guard<std::mutex> lock(mutex_);
    idle_.push_back(std::move(team));
  }

 private:
  std::mutex mutex_;
  std::size_t count_ = 0;
  std::vector<std::unique_ptr<Team>> idle_;
};

Teams& teams() {
  static Teams all;
  return all;
}

// The team of this thread's KeepAwake.
thread_local std::unique_ptr<Team> kept_team;

}  // namespace

namespace internal {

void run_tasks(int threads, std::int64_t tasks, TaskFunction function, const void* body) {
  const int workers = static_cast<int>(std::min<std::int64_t>(threads, tasks));
  if (workers <= 1 || inside_call) {
    for (std::int64_t task = 0; task < tasks; ++task) function(body, task, 0);
    return;
  }
  if (kept_team != nullptr) return kept_team->run(workers, tasks, function, body);
  std::unique_ptr<Team> team = teams().borrow();
  team->run(workers, tasks, function, body);
  teams().give_back(std::move(team));
}

}  // namespace internal

KeepAwake::KeepAwake(int threads, std::chrono::microseconds spin)
    : active_(threads > 1 && kept_team == nullptr && !inside_call) {
  if (!active_) return;
  kept_team = teams().borrow();
  kept_team->keep_awake(threads, spin);
}

KeepAwake::~KeepAwake() {
  if (!active_) return;
  kept_team->let_sleep();
  teams().give_back(std::move(kept_team));
}

}  // namespace leadsman
