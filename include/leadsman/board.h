// What this machine is and what it can do: facts that Linux exposes, and limits measured here.
//
// Reading never throws for what a system does not expose: such figures are absent. `root` is put
// before every path ("" for the machine itself); functions may be called from any thread.
#pragma once

#include <cstdint>
#include <optional>
#include <string>
#include <vector>

namespace leadsman {

struct Cache {
  int level = 0;
  std::string type;  ///< "Data", "Instruction" or "Unified", as sysfs has it
  std::int64_t bytes = 0;
};

struct Board {
  std::string processor;  ///< empty when unknown
  int cpus = 0;           ///< online
  int usable_cpus = 0;    ///< by this process: affinity and quota; 0 under another root
  std::int64_t memory_bytes = 0;
  std::vector<Cache> caches;  ///< of CPU 0, by level
  std::string instruction_set;

  std::int64_t last_cache_bytes() const;  ///< 0 when unknown
};
Board read_board(const std::string& root = "");

/// How the board is at a moment.
struct BoardState {
  std::optional<double> slowest_clock;  ///< least current / greatest clock over the CPUs, in (0, 1]
  std::optional<double> hertz;          ///< the current clock of the slowest CPU
  std::optional<double> celsius;        ///< of the hottest thermal zone
  std::optional<std::int64_t> throttle_events;  ///< since boot, all CPUs (x86)
};
BoardState read_board_state(const std::string& root = "");

/// True when a run between the two moments was slowed for heat: events were counted, or a zone is
/// at 80 degrees or more and a clock below 90 % of its greatest.
bool throttled(const BoardState& before, const BoardState& after);

/// Nanoseconds that the threads of this process waited for a processor that others had
/// (/proc/self/task/*/schedstat); nothing when the kernel does not count them.
std::optional<std::int64_t> waited_nanoseconds();

/// Binds this process, and threads that it starts later, to the CPUs. Throws Error(kUsage) when it
/// may not run on them.
void pin_to_cpus(const std::vector<int>& cpus);

/// Sustainable bandwidth in bytes a second, each kernel the best of several passes.
/// Source: McCalpin 1995, "Memory Bandwidth and Machine Balance in Current High Performance
/// Computers"; copy and scale move 16 bytes an element of double, add and triad 24.
struct StreamRates {
  std::int64_t array_bytes = 0;
  double copy = 0.0;
  double scale = 0.0;
  double add = 0.0;
  double triad = 0.0;
};

/// Arrays of 4 times the last cache (as McCalpin's rules ask; 32 MiB each where the cache is
/// unknown), less when three would not fit in a quarter of the memory. Throws Error(kMemory).
StreamRates measure_stream(const Board& board, int threads);

/// The limits of one number of threads.
struct BoardLimits {
  int threads = 0;
  double peak_flops = 0.0;  ///< FLOP/s (profile.h)
  StreamRates stream;

  /// The most FLOP/s that work of this many FLOP a byte can reach (Williams, Waterman & Patterson
  /// 2009): the lesser of the peak and intensity times the triad's bandwidth.
  double roof(double intensity) const;
  /// FLOP a byte where both limits meet.
  double ridge() const { return peak_flops / stream.triad; }
};
BoardLimits measure_limits(const Board& board, int threads);

}  // namespace leadsman
