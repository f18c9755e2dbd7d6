// The only place that starts threads (OpenMP, or std::thread where the build has no OpenMP).
#pragma once

#include <cstdint>
#include <type_traits>

namespace leadsman {

/// CPUs that this process may use: its affinity mask, capped by the quota of its control group.
/// At least 1.
int available_cpus();

namespace internal {
using TaskFunction = void (*)(const void* body, std::int64_t task, int worker);
void run_tasks(int threads, std::int64_t tasks, TaskFunction function, const void* body);
}  // namespace internal

/// Calls body(task, worker) once for each task in [0, tasks), from at most `threads` threads;
/// `worker` in [0, threads) is distinct among calls that run at the same time (an index into
/// per-thread workspace). Tasks are handed out as threads become free; their boundaries are the
/// caller's and must not depend on `threads`, so that results do not either. The body must not
/// throw. No allocation once a pool of that size exists. Nested calls run on one thread.
template <typename Body>
void parallel_for(int threads, std::int64_t tasks, const Body& body) {
  internal::run_tasks(
      threads, tasks,
      [](const void* b, std::int64_t task, int worker) {
        (*static_cast<const Body*>(b))(task, worker);
      },
      &body);
}

}  // namespace leadsman
