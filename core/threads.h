// Starts the threads that compute.
//
// A caller of parallel_for() borrows a team: threads that help it, kept from call to call. Teams
// never share work, so several callers may run at once; each has a team of its own meanwhile.
//
// How they wait. Between two calls of one run helpers spin: waking a sleeping thread takes tens of
// microseconds, as long as many a layer. A run says so by a KeepAwake; outside of one they sleep
// in the kernel and cost nothing. Spinning is bounded in time, gives way to other threads after a
// few microseconds, and is left out when a team is larger than the CPUs at hand.
//
// Nobody waits for a helper that has not begun: a call ends when all tasks are done, by whichever
// threads had the processor. More threads than free CPUs therefore cost little but their waking.
#pragma once

#include <chrono>
#include <cstdint>

namespace leadsman {

/// CPUs that this process may use: its affinity mask, capped by the quota of its control groups
/// (core/cpu_quota.h). At least 1.
int available_cpus();

namespace internal {
using TaskFunction = void (*)(const void* body, std::int64_t task, int worker);
void run_tasks(int threads, std::int64_t tasks, TaskFunction function, const void* body);
}  // namespace internal

/// Calls body(task, worker) once for each task in [0, tasks), from at most `threads` threads;
/// `worker` in [0, threads) is distinct among calls that run at the same time (an index into
/// per-thread workspace). Tasks are handed out as threads become free, so cores of different
/// speeds share them as they can; their boundaries are the caller's and must not depend on
/// `threads`, so that results do not either. The body must not throw. No allocation once a team of
/// that size exists. Nested calls run on one thread.
template <typename Body>
void parallel_for(int threads, std::int64_t tasks, const Body& body) {
  internal::run_tasks(
      threads, tasks,
      [](const void* b, std::int64_t task, int worker) {
        (*static_cast<const Body*>(b))(task, worker);
      },
      &body);
}

/// While it lives, the helpers of the calling thread's parallel_for() calls spin for up to `spin`
/// from one call to the next; they are woken at once, and sleep again afterwards. Does nothing for
/// one thread, or inside another KeepAwake or a parallel_for().
class KeepAwake {
 public:
  KeepAwake(int threads, std::chrono::microseconds spin);
  ~KeepAwake();
  KeepAwake(const KeepAwake&) = delete;
  KeepAwake& operator=(const KeepAwake&) = delete;

 private:
  bool active_;
};

}  // namespace leadsman
