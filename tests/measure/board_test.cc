#include "leadsman/board.h"

#include <filesystem>

#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "measure/stream.h"
#include "tests/support/files.h"

namespace leadsman {
namespace {

using testing::ScratchFolder;
using testing::write_file;

// A board with two CPUs of different speeds, as Linux shows it.
class FakeBoard {
 public:
  FakeBoard() {
    put("proc/cpuinfo", "processor\t: 0\nmodel name\t: Imaginary Nine\n");
    put("proc/meminfo", "MemTotal:        2048000 kB\nMemFree: 1 kB\n");
    put("sys/devices/system/cpu/cpufreq/policy0/x", "");  // begins with "cpu", is none
    cache("index0", "1", "Data", "32K");
    cache("index1", "1", "Instruction", "64K");
    cache("index2", "2", "Unified", "1M");
    clock("cpu0", 1800000, 2000000);
    clock("cpu1", 900000, 1500000);
    put("sys/class/thermal/thermal_zone0/temp", "45000\n");
    put("sys/class/thermal/thermal_zone1/temp", "81500\n");
  }

  void put(const std::string& path, const std::string& text) const {
    const std::filesystem::path file = folder_ / path;
    std::filesystem::create_directories(file.parent_path());
    write_file(file, text);
  }
  void clock(const std::string& cpu, int now, int greatest) const {
    put("sys/devices/system/cpu/" + cpu + "/cpufreq/scaling_cur_freq", std::to_string(now));
    put("sys/devices/system/cpu/" + cpu + "/cpufreq/cpuinfo_max_freq", std::to_string(greatest));
  }
  std::string root() const { return folder_ / ""; }

 private:
  void cache(const std::string& index, const char* level, const char* type, const char* size) {
    const std::string path = "sys/devices/system/cpu/cpu0/cache/" + index + "/";
    put(path + "level", level);
    put(path + "type", std::string(type) + "\n");
    put(path + "size", std::string(size) + "\n");
  }
  ScratchFolder folder_;
};

TEST(Board, IsReadFromProcAndSys) {
  const FakeBoard fake;
  const Board board = read_board(fake.root());
  EXPECT_EQ(board.processor, "Imaginary Nine");
  EXPECT_EQ(board.cpus, 2);
  EXPECT_EQ(board.memory_bytes, 2048000LL * 1024);
  ASSERT_EQ(board.caches.size(), 3U);
  EXPECT_EQ(board.caches[0].bytes, 32 * 1024);
  EXPECT_EQ(board.caches[2].level, 2);
  EXPECT_EQ(board.last_cache_bytes(), 1024 * 1024);
}

TEST(Board, NamesABoardWithoutModelNames) {
  const FakeBoard fake;
  fake.put("proc/cpuinfo", "processor\t: 0\nCPU part\t: 0xd03\n");
  fake.put("proc/device-tree/model", std::string("Small Board 4\0", 14));
  EXPECT_EQ(read_board(fake.root()).processor, "Small Board 4");
}

TEST(Board, ToleratesASystemThatShowsNothing) {
  const ScratchFolder empty;
  const Board board = read_board(empty / "");
  EXPECT_EQ(board.cpus, 0);
  EXPECT_EQ(board.last_cache_bytes(), 0);
  const BoardState state = read_board_state(empty / "");
  EXPECT_FALSE(state.hertz || state.celsius || state.slowest_clock || state.throttle_events);
  EXPECT_FALSE(throttled(state, state));
}

TEST(BoardState, IsThatOfTheSlowestAndTheHottest) {
  const FakeBoard fake;
  const BoardState state = read_board_state(fake.root());
  EXPECT_DOUBLE_EQ(state.slowest_clock.value(), 0.6);
  EXPECT_DOUBLE_EQ(state.hertz.value(), 900e6);
  EXPECT_DOUBLE_EQ(state.celsius.value(), 81.5);
  EXPECT_TRUE(throttled(state, state));  // hot and below 90 % of its clock
}

TEST(BoardState, IsNotThrottledWhileColdOrAtFullClock) {
  const FakeBoard fake;
  fake.clock("cpu1", 1500000, 1500000);
  const BoardState fast = read_board_state(fake.root());
  EXPECT_FALSE(throttled(fast, fast));
  fake.clock("cpu1", 600000, 1500000);  // saving power
  fake.put("sys/class/thermal/thermal_zone1/temp", "30000\n");
  const BoardState cold = read_board_state(fake.root());
  EXPECT_FALSE(throttled(cold, cold));
}

TEST(BoardState, CountsThrottlingEvents) {
  const FakeBoard fake;
  fake.put("sys/class/thermal/thermal_zone1/temp", "30000\n");
  const std::string counter = "sys/devices/system/cpu/cpu1/thermal_throttle/core_throttle_count";
  fake.put(counter, "7\n");
  const BoardState before = read_board_state(fake.root());
  EXPECT_EQ(before.throttle_events.value(), 7);
  EXPECT_FALSE(throttled(before, before));
  fake.put(counter, "8\n");
  EXPECT_TRUE(throttled(before, read_board_state(fake.root())));
}

// STREAM's own count of bytes, and the values it expects after one turn of the four kernels.
TEST(Stream, ComputesAndCountsWhatMcCalpinDefines) {
  using measure::StreamKernel;
  for (const int threads : {1, 3}) {
    measure::StreamArrays arrays(1001);
    for (const StreamKernel kernel :
         {StreamKernel::kCopy, StreamKernel::kScale, StreamKernel::kAdd, StreamKernel::kTriad}) {
      measure::stream_pass(kernel, arrays, threads);
    }
    for (std::size_t i = 0; i < 1001; ++i) {
      ASSERT_EQ(arrays.b[i], 3.0);   // 3 c, when c was a = 1
      ASSERT_EQ(arrays.c[i], 4.0);   // a + b
      ASSERT_EQ(arrays.a[i], 15.0);  // b + 3 c
    }
  }
  EXPECT_EQ(measure::stream_bytes(StreamKernel::kCopy, 10), 160);
  EXPECT_EQ(measure::stream_bytes(StreamKernel::kScale, 10), 160);
  EXPECT_EQ(measure::stream_bytes(StreamKernel::kAdd, 10), 240);
  EXPECT_EQ(measure::stream_bytes(StreamKernel::kTriad, 10), 240);
}

TEST(Stream, UsesArraysOfFourTimesTheLastCache) {
  Board board;
  board.caches = {{1, "Data", 4096}, {2, "Unified", 65536}};
  const StreamRates rates = measure_stream(board, 1);
  EXPECT_EQ(rates.array_bytes, 4 * 65536);
  EXPECT_GT(std::min(std::min(rates.copy, rates.scale), std::min(rates.add, rates.triad)), 0.0);
  board.memory_bytes = 1200000;  // three arrays would be more than a quarter
  EXPECT_EQ(measure_stream(board, 1).array_bytes, 100000);
}

TEST(Roof, IsTheLesserOfBothLimits) {
  BoardLimits limits;
  limits.peak_flops = 100e9;
  limits.stream.triad = 20e9;
  EXPECT_DOUBLE_EQ(limits.ridge(), 5.0);
  EXPECT_DOUBLE_EQ(limits.roof(2.0), 40e9);
  EXPECT_DOUBLE_EQ(limits.roof(50.0), 100e9);
}

TEST(Pinning, RefusesACpuThatIsNotThere) {
  EXPECT_THROW(pin_to_cpus({4000}), Error);
  EXPECT_THROW(pin_to_cpus({-1}), Error);
}

}  // namespace
}  // namespace leadsman
