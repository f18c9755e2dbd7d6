#include "core/threads.h"

#include <atomic>
#include <chrono>
#include <ctime>
#include <numeric>
#include <thread>
#include <vector>

#include <gtest/gtest.h>

namespace leadsman {
namespace {

TEST(AvailableCpus, AreAtLeastOneAndNoMoreThanThereAre) {
  EXPECT_GE(available_cpus(), 1);
  const unsigned all = std::thread::hardware_concurrency();
  if (all > 0) {
    EXPECT_LE(available_cpus(), static_cast<int>(all));
  }
}

class ParallelFor : public ::testing::TestWithParam<int> {};

TEST_P(ParallelFor, RunsEachTaskOnce) {
  for (const std::int64_t tasks : {0, 1, 2, 7, 1000}) {
    std::vector<std::atomic<int>> runs(static_cast<std::size_t>(tasks));
    parallel_for(GetParam(), tasks,
                 [&](std::int64_t task, int) { ++runs[static_cast<std::size_t>(task)]; });
    for (const auto& count : runs) ASSERT_EQ(count.load(), 1) << tasks;
  }
}

TEST_P(ParallelFor, GivesEachWorkerAnIndexOfItsOwn) {
  const int threads = GetParam();
  std::vector<std::atomic<bool>> busy(static_cast<std::size_t>(threads));
  std::atomic<int> clashes{0};
  std::atomic<int> out_of_range{0};
  parallel_for(threads, 200, [&](std::int64_t, int worker) {
    if (worker < 0 || worker >= threads) {
      ++out_of_range;
      return;
    }
    auto& flag = busy[static_cast<std::size_t>(worker)];
    if (flag.exchange(true)) ++clashes;
    std::this_thread::yield();
    flag = false;
  });
  EXPECT_EQ(clashes.load(), 0);
  EXPECT_EQ(out_of_range.load(), 0);
}

TEST_P(ParallelFor, NestedCallsRunEachTaskOnceOnOneThread) {
  std::vector<std::atomic<int>> runs(6 * 5);
  std::atomic<int> wandered{0};
  parallel_for(GetParam(), 6, [&](std::int64_t outer, int) {
    const auto thread = std::this_thread::get_id();
    parallel_for(GetParam(), 5, [&](std::int64_t inner, int worker) {
      if (GetParam() > 1 && (worker != 0 || std::this_thread::get_id() != thread)) ++wandered;
      ++runs[static_cast<std::size_t>(outer * 5 + inner)];
    });
  });
  for (const auto& count : runs) ASSERT_EQ(count.load(), 1);
  EXPECT_EQ(wandered.load(), 0);
}

// A nested call that has come back leaves its caller free to start threads again.
TEST_P(ParallelFor, WorksAgainAfterwards) {
  for (int round = 0; round < 20; ++round) {
    std::atomic<std::int64_t> sum{0};
    parallel_for(GetParam(), 100, [&](std::int64_t task, int) { sum += task; });
    ASSERT_EQ(sum.load(), 99 * 100 / 2);
  }
}

// Calls of every size in turn, so that helpers come and go while others are at work.
TEST_P(ParallelFor, LosesNoTaskAmongManyShortCalls) {
  for (const bool spins : {false, true}) {
    const KeepAwake awake(spins ? GetParam() : 1, std::chrono::microseconds(100));
    std::vector<std::atomic<int>> runs(64);
    for (int call = 0; call < 3000; ++call) {
      const int tasks = 1 + call * 7 % 64;
      parallel_for(GetParam() - call % 2, tasks,
                   [&](std::int64_t task, int) { ++runs[static_cast<std::size_t>(task)]; });
      for (int task = 0; task < tasks; ++task) {
        ASSERT_EQ(runs[static_cast<std::size_t>(task)].exchange(0), 1);
      }
    }
  }
}

INSTANTIATE_TEST_SUITE_P(Threads, ParallelFor, ::testing::Values(1, 2, 3, 16),
                         ::testing::PrintToStringParamName());

TEST(ParallelFor, ServesSeveralCallersAtOnce) {
  std::vector<std::int64_t> sums(4, 0);
  std::vector<std::thread> callers;
  for (std::int64_t& sum : sums) {
    callers.emplace_back([&sum] {
      std::vector<std::int64_t> squares(500);
      parallel_for(2, 500, [&](std::int64_t task, int) {
        squares[static_cast<std::size_t>(task)] = task * task;
      });
      sum = std::accumulate(squares.begin(), squares.end(), std::int64_t{0});
    });
  }
  for (std::thread& caller : callers) caller.join();
  for (const std::int64_t sum : sums) EXPECT_EQ(sum, 499 * 500 * 999 / 6);
}

double process_seconds() {
  timespec time{};
  clock_gettime(CLOCK_PROCESS_CPUTIME_ID, &time);
  return static_cast<double>(time.tv_sec) + 1e-9 * static_cast<double>(time.tv_nsec);
}

TEST(KeepAwake, ItsHelpersSleepAfterwards) {
  {
    const KeepAwake awake(4, std::chrono::seconds(10));
    parallel_for(4, 8, [](std::int64_t, int) {});
  }
  const double before = process_seconds();
  std::this_thread::sleep_for(std::chrono::milliseconds(100));
  EXPECT_LT(process_seconds() - before, 0.05);
}

TEST(KeepAwake, HelpersSleepWhenTheirTimeIsOver) {
  const KeepAwake awake(2, std::chrono::milliseconds(1));
  parallel_for(2, 8, [](std::int64_t, int) {});
  const double before = process_seconds();
  std::this_thread::sleep_for(std::chrono::milliseconds(100));
  EXPECT_LT(process_seconds() - before, 0.05);
}

TEST(KeepAwake, NestsAndServesCallersOnManyThreads) {
  std::atomic<int> sum{0};
  std::vector<std::thread> callers;
  for (int caller = 0; caller < 4; ++caller) {
    callers.emplace_back([&sum] {
      const KeepAwake outer(3, std::chrono::microseconds(50));
      for (int round = 0; round < 50; ++round) {
        const KeepAwake inner(2, std::chrono::microseconds(50));
        parallel_for(3, 10, [&](std::int64_t, int) {
          const KeepAwake inside(2, std::chrono::microseconds(50));
          ++sum;
        });
      }
    });
  }
  for (std::thread& caller : callers) caller.join();
  EXPECT_EQ(sum.load(), 4 * 50 * 10);
}

}  // namespace
}  // namespace leadsman
