#include "core/threads.h"

#include <algorithm>
#include <fstream>
#include <string>
#include <thread>

#include <sched.h>

#ifdef LEADSMAN_OPENMP
#include <omp.h>
#else
#include <atomic>
#include <vector>
#endif

namespace leadsman {
namespace {

// CPUs that the control group (version 2) allows: "max 100000" or "150000 100000".
int quota_cpus() {
  std::ifstream file("/sys/fs/cgroup/cpu.max");
  std::string quota;
  double period = 0;
  if (!(file >> quota >> period) || quota == "max" || period <= 0) return 1 << 20;
  char* end = nullptr;
  const double microseconds = std::strtod(quota.c_str(), &end);
  if (end == quota.c_str()) return 1 << 20;
  return std::max(1, static_cast<int>(microseconds / period + 0.5));
}

}  // namespace

int available_cpus() {
  int count = static_cast<int>(std::thread::hardware_concurrency());
  cpu_set_t set;
  CPU_ZERO(&set);
  if (sched_getaffinity(0, sizeof(set), &set) == 0) count = CPU_COUNT(&set);
  return std::max(1, std::min(count, quota_cpus()));
}

namespace internal {

#ifdef LEADSMAN_OPENMP

void run_tasks(int threads, std::int64_t tasks, TaskFunction function, const void* body) {
  const int workers = static_cast<int>(std::min<std::int64_t>(threads, tasks));
  if (workers <= 1 || omp_in_parallel() != 0) {
    for (std::int64_t task = 0; task < tasks; ++task) function(body, task, 0);
    return;
  }
#pragma omp parallel for num_threads(workers) schedule(dynamic, 1)
  for (std::int64_t task = 0; task < tasks; ++task) {
    function(body, task, omp_get_thread_num());
  }
}

#else

namespace {
thread_local bool inside_region = false;
}

void run_tasks(int threads, std::int64_t tasks, TaskFunction function, const void* body) {
  const int workers = static_cast<int>(std::min<std::int64_t>(threads, tasks));
  if (workers <= 1 || inside_region) {
    for (std::int64_t task = 0; task < tasks; ++task) function(body, task, 0);
    return;
  }
  std::atomic<std::int64_t> next{0};
  const auto work = [&](int worker) {
    inside_region = true;
    for (std::int64_t task = next++; task < tasks; task = next++) function(body, task, worker);
    inside_region = false;
  };
  std::vector<std::thread> others;
  for (int worker = 1; worker < workers; ++worker) others.emplace_back(work, worker);
  work(0);
  for (std::thread& other : others) other.join();
}

#endif

}  // namespace internal
}  // namespace leadsman
