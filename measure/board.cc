#include "leadsman/board.h"

#include <algorithm>
#include <charconv>
#include <filesystem>
#include <fstream>

#include <sched.h>

#include "core/threads.h"
#include "leadsman/error.h"
#include "leadsman/profile.h"

namespace leadsman {
namespace {

namespace fs = std::filesystem;

std::optional<std::string> first_line(const fs::path& path) {
  std::ifstream file(path);
  std::string line;
  if (!std::getline(file, line)) return std::nullopt;
  line.erase(std::find(line.begin(), line.end(), '\0'), line.end());  // device tree strings
  return line;
}

// The number at the beginning of the file.
std::optional<std::int64_t> number_in(const fs::path& path) {
  std::ifstream file(path);
  std::int64_t value = 0;
  if (!(file >> value)) return std::nullopt;
  return value;
}

std::vector<fs::path> entries(const fs::path& folder, const std::string& prefix) {
  std::vector<fs::path> found;
  std::error_code error;
  for (fs::directory_iterator entry(folder, error), end; !error && entry != end;
       entry.increment(error)) {
    const std::string name = entry->path().filename();
    if (name.starts_with(prefix) && name.size() > prefix.size() &&
        name.find_first_not_of("0123456789", prefix.size()) == std::string::npos) {
      found.push_back(entry->path());
    }
  }
  std::ranges::sort(found);
  return found;
}

// "32K", "32768K", "8M".
std::int64_t size_text(const std::string& text) {
  std::int64_t value = 0;
  const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), value);
  if (error != std::errc{}) return 0;
  const char unit = end == text.data() + text.size() ? ' ' : *end;
  return value * (unit == 'K' ? 1024 : unit == 'M' ? 1024 * 1024 : 1);
}

// The value behind "KEY   : " or "KEY:   " of the first line that begins with KEY.
std::string field(const fs::path& path, const std::string& key) {
  std::ifstream file(path);
  std::string line;
  while (std::getline(file, line)) {
    if (!line.starts_with(key)) continue;
    const std::size_t colon = line.find(':');
    const std::size_t begin = line.find_first_not_of(" \t", colon + 1);
    return colon == std::string::npos || begin == std::string::npos ? "" : line.substr(begin);
  }
  return "";
}

fs::path cpu_folder(const std::string& root) {
  return root + "/sys/devices/system/cpu";
}

template <typename Value>
void keep(std::optional<Value>& kept, Value value, bool better) {
  if (!kept || better) kept = value;
}

}  // namespace

std::int64_t Board::last_cache_bytes() const {
  std::int64_t bytes = 0;
  int level = 0;
  for (const Cache& cache : caches) {
    if (cache.type == "Instruction" || cache.level < level) continue;
    level = cache.level;
    bytes = cache.bytes;
  }
  return bytes;
}

Board read_board(const std::string& root) {
  Board board;
  board.processor = field(root + "/proc/cpuinfo", "model name");
  if (board.processor.empty()) {
    board.processor = first_line(root + "/proc/device-tree/model").value_or("");
  }
  board.cpus = static_cast<int>(entries(cpu_folder(root), "cpu").size());
  board.usable_cpus = root.empty() ? available_cpus() : 0;
  board.memory_bytes =
      1024 * std::strtoll(field(root + "/proc/meminfo", "MemTotal").c_str(), nullptr, 10);
  for (const fs::path& index : entries(cpu_folder(root) / "cpu0/cache", "index")) {
    const auto level = number_in(index / "level");
    if (!level) continue;
    board.caches.push_back({static_cast<int>(*level), first_line(index / "type").value_or(""),
                            size_text(first_line(index / "size").value_or(""))});
  }
  std::ranges::stable_sort(board.caches, {}, &Cache::level);
  board.instruction_set = instruction_set();
  return board;
}

BoardState read_board_state(const std::string& root) {
  BoardState state;
  for (const fs::path& cpu : entries(cpu_folder(root), "cpu")) {
    const auto clock = number_in(cpu / "cpufreq/scaling_cur_freq");  // kHz
    const auto greatest = number_in(cpu / "cpufreq/cpuinfo_max_freq");
    if (clock && greatest && *clock > 0 && *greatest > 0) {
      const double part =
          std::min(1.0, static_cast<double>(*clock) / static_cast<double>(*greatest));
      const bool slower = state.slowest_clock && part < *state.slowest_clock;
      keep(state.slowest_clock, part, slower);
      keep(state.hertz, 1e3 * static_cast<double>(*clock), slower);
    }
    if (const auto events = number_in(cpu / "thermal_throttle/core_throttle_count")) {
      state.throttle_events = state.throttle_events.value_or(0) + *events;
    }
  }
  for (const fs::path& zone : entries(root + "/sys/class/thermal", "thermal_zone")) {
    if (const auto milli = number_in(zone / "temp")) {
      const double celsius = 1e-3 * static_cast<double>(*milli);
      keep(state.celsius, celsius, state.celsius && celsius > *state.celsius);
    }
  }
  return state;
}

bool throttled(const BoardState& before, const BoardState& after) {
  if (before.throttle_events && after.throttle_events &&
      *after.throttle_events > *before.throttle_events) {
    return true;
  }
  return after.celsius.value_or(0.0) >= 80.0 && after.slowest_clock.value_or(1.0) < 0.9;
}

std::optional<std::int64_t> waited_nanoseconds() {
  std::optional<std::int64_t> sum;
  for (const fs::path& thread : entries("/proc/self/task", "")) {
    std::ifstream file(thread / "schedstat");  // run, waited, turns (scheduler/sched-stats.rst)
    std::int64_t run = 0;
    std::int64_t waited = 0;
    if (file >> run >> waited) sum = sum.value_or(0) + waited;
  }
  return sum;
}

void pin_to_cpus(const std::vector<int>& cpus) {
  cpu_set_t set;
  CPU_ZERO(&set);
  for (const int cpu : cpus) {
    if (cpu < 0 || cpu >= CPU_SETSIZE) throw_usage("there is no CPU " + std::to_string(cpu));
    CPU_SET(static_cast<std::size_t>(cpu), &set);
  }
  cpu_set_t bound;
  CPU_ZERO(&bound);
  const bool done = sched_setaffinity(0, sizeof set, &set) == 0 &&
                    sched_getaffinity(0, sizeof bound, &bound) == 0;
  if (!done || CPU_EQUAL(&set, &bound) == 0) {
    throw_usage("this process may not run on all of the CPUs asked for");
  }
}

double BoardLimits::roof(double intensity) const {
  return std::min(peak_flops, intensity * stream.triad);
}

BoardLimits measure_limits(const Board& board, int threads) {
  return {threads, measure_peak(threads), measure_stream(board, threads)};
}

}  // namespace leadsman
