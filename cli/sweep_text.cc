#include "sweep_text.h"

#include <algorithm>
#include <cmath>
#include <map>
#include <ostream>

#include "text.h"

namespace leadsman::cli {
namespace {

using Json = nlohmann::ordered_json;
using Align = Table::Align;

constexpr double kMiB = 1024.0 * 1024.0;

std::string bar(double share, int width) {
  const int full = std::clamp(static_cast<int>(std::lround(share * width)), 0, width);
  return std::string(static_cast<std::size_t>(full), '#') +
         std::string(static_cast<std::size_t>(width - full), '.');
}

// A figure that may be missing.
std::string figure(const Json& value, int decimals, double factor = 1.0) {
  return value.is_number() ? fixed(factor * value.get<double>(), decimals) : "";
}

std::string time_figure(const Json& ms) {
  const double value = ms;
  return fixed(value, value < 10.0 ? 3 : value < 1000.0 ? 1 : 0);
}

std::string side(const Json& size) {
  return std::to_string(size.get<std::int64_t>());
}

void print_board(std::ostream& out, const Json& document) {
  const Json& board = document["board"];
  const std::string processor = board["processor"];
  out << emphasize(processor.empty() ? "unknown processor" : processor) << ", "
      << board["usable_cpus"] << " of " << counted(board["cpus"], "CPU") << ", "
      << board["instruction_set"].get<std::string>() << ", "
      << bytes_text(board["memory_bytes"].get<double>()) << " memory\n";
  std::string caches;
  for (const Json& cache : board["caches"]) {
    if (cache["type"] == "Instruction") continue;
    caches += (caches.empty() ? "" : ", ") + ("L" + std::to_string(cache["level"].get<int>())) +
              " " + bytes_text(cache["bytes"].get<double>());
  }
  if (!caches.empty()) out << "caches " << caches << '\n';
  out << '\n';
  Table table({{"threads", Align::kRight},
               {"peak GFLOP/s", Align::kRight},
               {"copy GB/s", Align::kRight},
               {"scale", Align::kRight},
               {"add", Align::kRight},
               {"triad", Align::kRight},
               {"ridge FLOP/B", Align::kRight}});
  for (const Json& limits : document["limits"]) {
    table.add({limits["threads"].dump(), figure(limits["peak_gflops"], 1),
               figure(limits["copy_gb_per_s"], 1), figure(limits["scale_gb_per_s"], 1),
               figure(limits["add_gb_per_s"], 1), figure(limits["triad_gb_per_s"], 1),
               figure(limits["ridge_flop_per_byte"], 1)});
  }
  table.print(out);
}

std::string marks_of(const Json& point) {
  std::string marks;
  if (!point["stable"].get<bool>()) marks += '~';
  if (point["busy_runs"] > 0) marks += 'b';
  if (point["throttled_runs"] > 0) marks += 't';
  return marks;
}

void print_points(std::ostream& out, const Json& points) {
  double longest = 0.0;
  for (const Json& point : points) longest = std::max(longest, point.value("p50_ms", 0.0));
  Table table({{"model", Align::kLeft, true},
               {"size", Align::kRight},
               {"thr", Align::kRight},
               {"p50 ms", Align::kRight},
               {"p99 ms", Align::kRight},
               {"p50"},
               {"GFLOP/s", Align::kRight},
               {"roof", Align::kRight},
               {"MiB", Align::kRight},
               {""}});
  std::string marks;
  for (const Json& point : points) {
    if (point.contains("failure")) continue;
    const Json& memory =
        point["resident_bytes"].is_null() ? point["predicted_bytes"] : point["resident_bytes"];
    table.add({point["model"], side(point["size"]), point["threads"].dump(),
               time_figure(point["p50_ms"]), time_figure(point["p99_ms"]),
               bar(point["p50_ms"].get<double>() / longest, 8), figure(point["gflops"], 1),
               figure(point["roof_fraction"], 2), figure(memory, 1, 1.0 / kMiB), marks_of(point)});
    marks += marks_of(point);
  }
  table.print(out);
  const auto explain = [&](char mark, const char* meaning) {
    if (marks.find(mark) != std::string::npos) out << mark << " " << meaning << '\n';
  };
  explain('~', "not stable: do not rely on these figures");
  explain('b', "the machine was busy with other work in some of the runs");
  explain('t', "the processor was throttled in some of the runs");
  for (const Json& point : points) {
    if (!point.contains("failure")) continue;
    out << point["model"].get<std::string>() << " does not take size " << point["size"] << ": "
        << point["failure"].get<std::string>() << '\n';
  }
}

// The largest size of each model with each number of threads.
std::vector<const Json*> largest_points(const Json& points) {
  std::map<std::pair<std::string, int>, const Json*> largest;
  std::vector<const Json*> sorted;
  for (const Json& point : points) {
    if (point.contains("failure")) continue;
    const Json*& kept = largest[{point["model"], point["threads"]}];
    if (kept == nullptr || (*kept)["size"] < point["size"]) kept = &point;
  }
  for (const auto& entry : largest) sorted.push_back(entry.second);
  return sorted;
}

void print_families(std::ostream& out, const Json& points) {
  for (const Json* point : largest_points(points)) {
    out << '\n'
        << emphasize((*point)["model"].get<std::string>() + " at " + side((*point)["size"]) + ", " +
                     counted((*point)["threads"], "thread"))
        << '\n';
    Table table({{"family"},
                 {"share", Align::kRight},
                 {""},
                 {"MACs", Align::kRight},
                 {"bytes", Align::kRight},
                 {"GFLOP/s", Align::kRight},
                 {"roof", Align::kRight},
                 {"bound by"}});
    for (const Json& family : (*point)["families"]) {
      const auto macs = family["macs"].get<double>();
      const auto bytes = family["bytes"].get<double>();
      const Json& bound = family["bound"];
      table.add({family["family"], figure(family["share"], 1, 100.0) + "%",
                 bar(family["share"].get<double>(), 10), macs > 0.0 ? scaled(macs) : "",
                 bytes > 0.0 ? bytes_text(bytes) : "",
                 macs > 0.0 ? figure(family["gflops"], 1) : "", figure(family["roof_fraction"], 2),
                 bound.is_null() ? "" : bound.get<std::string>()});
    }
    table.print(out);
  }
}

std::string interval_text(const Json& interval, int decimals) {
  return fixed(interval[0], decimals) + " to " + fixed(interval[1], decimals);
}

void print_growth(std::ostream& out, const Json& growths) {
  for (const Json& growth : growths) {
    out << '\n'
        << emphasize(growth["model"].get<std::string>() + ", " +
                     counted(growth["threads"], "thread"))
        << ": time ~ size^" << fixed(growth["exponent"], 2) << " ("
        << interval_text(growth["exponent_interval"], 2) << "), MACs ~ size^"
        << fixed(growth["macs_exponent"], 2) << '\n';
    if (const Json& held = growth["held_out"]; !held.is_null()) {
      out << "  size " << held["size"]
          << " from the smaller ones: " << time_figure(held["predicted_ms"]) << " ms ("
          << time_figure(held["interval_ms"][0]) << " to " << time_figure(held["interval_ms"][1])
          << "), measured " << time_figure(held["measured_ms"])
          << (held["inside"].get<bool>() ? ": inside\n" : ": outside\n");
    }
    if (const Json& tokens = growth["tokens"]; !tokens.is_null()) {
      out << "  " << figure(tokens["linear_us"], 2) << " us a token and "
          << figure(tokens["quadratic_ns"], 2) << " ns a pair of tokens";
      if (tokens["half_size"].is_number()) {
        out << ": pairs take a tenth of\n  the time from size " << figure(tokens["tenth_size"], 0)
            << ", half from " << figure(tokens["half_size"], 0);
      }
      out << '\n';
    }
  }
}

void print_budget(std::ostream& out, const Json& budget) {
  if (budget.is_null()) return;
  out << '\n';
  Table table({{"model", Align::kLeft, true},
               {"thr", Align::kRight},
               {"largest", Align::kRight},
               {"next", Align::kRight},
               {"why not"}});
  for (const Json& verdict : budget["verdicts"]) {
    const std::int64_t largest = verdict["largest_size"];
    const std::int64_t next = verdict["next_size"];
    table.add({verdict["model"], verdict["threads"].dump(),
               largest > 0 ? std::to_string(largest) : "none", next > 0 ? std::to_string(next) : "",
               verdict["reason"]});
  }
  table.print(out);
}

void print_changes(std::ostream& out, const Json& changes) {
  if (changes.empty()) return;
  out << '\n';
  Table table({{"model", Align::kLeft, true},
               {"size", Align::kRight},
               {"thr", Align::kRight},
               {"times the earlier", Align::kRight},
               {"interval"},
               {""}});
  for (const Json& change : changes) {
    table.add({change["model"], side(change["size"]), change["threads"].dump(),
               figure(change["ratio"], 3), interval_text(change["interval"], 3),
               change["verdict"]});
  }
  table.print(out);
}

}  // namespace

void print_sweep(std::ostream& out, const Json& document) {
  print_board(out, document);
  out << '\n';
  print_points(out, document["points"]);
  print_families(out, document["points"]);
  print_growth(out, document["growth"]);
  print_budget(out, document["budget"]);
  print_changes(out, document["changes"]);
}

}  // namespace leadsman::cli
