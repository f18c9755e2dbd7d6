// JSON and CSV of a sweep.
#include <algorithm>
#include <cmath>

#include <nlohmann/json.hpp>

#include "leadsman/error.h"
#include "leadsman/sweep_report.h"
#include "leadsman/version.h"

namespace leadsman {
namespace {

using Json = nlohmann::ordered_json;

template <typename Value>
Json or_null(const std::optional<Value>& value) {
  return value ? Json(*value) : Json(nullptr);
}

Json finite(double value) {
  return std::isfinite(value) ? Json(value) : Json(nullptr);
}

Json interval_json(const Interval& interval, double factor = 1.0) {
  return {factor * interval.low, factor * interval.high};
}

Json board_json(const Board& board) {
  Json caches = Json::array();
  for (const Cache& cache : board.caches) {
    caches.push_back({{"level", cache.level}, {"type", cache.type}, {"bytes", cache.bytes}});
  }
  return {{"processor", board.processor},
          {"cpus", board.cpus},
          {"usable_cpus", board.usable_cpus},
          {"memory_bytes", board.memory_bytes},
          {"caches", caches},
          {"instruction_set", board.instruction_set}};
}

Json limits_json(const BoardLimits& limits) {
  const StreamRates& stream = limits.stream;
  return {{"threads", limits.threads},
          {"peak_gflops", 1e-9 * limits.peak_flops},
          {"stream_array_bytes", stream.array_bytes},
          {"copy_gb_per_s", 1e-9 * stream.copy},
          {"scale_gb_per_s", 1e-9 * stream.scale},
          {"add_gb_per_s", 1e-9 * stream.add},
          {"triad_gb_per_s", 1e-9 * stream.triad},
          {"ridge_flop_per_byte", limits.ridge()}};
}

// Rate, intensity and place under the roof of work that takes `seconds`. Work without multiply-adds
// is measured against the bandwidth.
void add_rates(Json& object, double seconds, std::int64_t macs, std::int64_t bytes,
               const BoardLimits& limits) {
  const double flops = 2.0 * static_cast<double>(macs);
  const auto moved = static_cast<double>(bytes);
  object["gflops"] = 1e-9 * flops / seconds;
  object["flop_per_byte"] = moved > 0.0 ? Json(flops / moved) : Json(nullptr);
  object["roof_gflops"] = nullptr;
  object["roof_fraction"] = nullptr;
  object["bound"] = nullptr;
  if (moved <= 0.0) return;
  const double intensity = flops / moved;
  if (macs > 0) {
    object["roof_gflops"] = 1e-9 * limits.roof(intensity);
    object["roof_fraction"] = flops / seconds / limits.roof(intensity);
  } else {
    object["roof_fraction"] = moved / seconds / limits.stream.triad;
  }
  object["bound"] = intensity < limits.ridge() ? "memory" : "compute";
}

Json families_json(const SweepPoint& point, const BoardLimits& limits) {
  double whole = 0.0;
  for (const FamilyWork& work : point.families) whole += work.seconds;
  Json families = Json::array();
  for (const FamilyWork& work : point.families) {
    Json family = {{"family", work.family},
                   {"ms", 1e3 * work.seconds},
                   {"share", work.seconds / whole},
                   {"macs", work.macs},
                   {"bytes", work.bytes}};
    add_rates(family, work.seconds, work.macs, work.bytes, limits);
    families.push_back(std::move(family));
  }
  return families;
}

Json point_json(const SweepPoint& point, const Sweep& sweep) {
  Json object = {{"model", point.model}, {"size", point.size}, {"threads", point.threads}};
  if (!point.failure.empty()) {
    object["failure"] = point.failure;
    return object;
  }
  std::int64_t busy = 0;
  std::int64_t slowed = 0;
  Json samples = Json::array();
  for (const SweepSample& sample : point.samples) {
    busy += sample.busy ? 1 : 0;
    slowed += sample.throttled ? 1 : 0;
    samples.push_back(1e3 * sample.seconds);
  }
  const double median = point.seconds_at(0.5);
  object["runs"] = point.samples.size();
  object["min_ms"] = 1e3 * point.seconds_at(0.0);
  object["p50_ms"] = 1e3 * median;
  object["p90_ms"] = 1e3 * point.seconds_at(0.9);
  object["p99_ms"] = 1e3 * point.seconds_at(0.99);
  object["spread"] = (point.seconds_at(0.9) - point.seconds_at(0.1)) / median;
  object["stable"] = point.unstable.empty();
  object["unstable"] = point.unstable;
  object["busy_runs"] = busy;
  object["throttled_runs"] = slowed;
  object["tokens"] = point.tokens;
  object["macs"] = point.macs;
  object["bytes"] = point.bytes();
  add_rates(object, median, point.macs, point.bytes(), sweep.limits_of(point.threads));
  object["predicted_bytes"] = point.foreseen_bytes();
  object["resident_bytes"] = point.resident ? Json(point.resident->peak_bytes) : Json(nullptr);
  object["base_bytes"] = point.resident ? Json(point.resident->base_bytes) : Json(nullptr);
  object["celsius"] = or_null(point.state.celsius);
  object["clock_hertz"] = or_null(point.state.hertz);
  object["samples_ms"] = samples;
  Json marks = Json::array();
  for (const SweepSample& sample : point.samples) {
    marks.push_back(sample.throttled ? "throttled" : sample.busy ? "busy" : "");
  }
  object["marks"] = marks;
  object["families"] = families_json(point, sweep.limits_of(point.threads));
  return object;
}

Json growth_json(const Growth& growth) {
  Json object = {{"model", growth.model},
                 {"threads", growth.threads},
                 {"exponent", growth.time.exponent},
                 {"exponent_interval", interval_json(growth.time.exponent_interval)},
                 {"coefficient_ms", 1e3 * growth.time.coefficient},
                 {"macs_exponent", growth.macs_exponent},
                 {"held_out", nullptr},
                 {"tokens", nullptr}};
  if (growth.held_out) {
    const auto& held = *growth.held_out;
    const Interval& interval = held.predicted.interval;
    object["held_out"] = {
        {"size", held.size},
        {"predicted_ms", 1e3 * held.predicted.value},
        {"interval_ms", interval_json(interval, 1e3)},
        {"measured_ms", 1e3 * held.measured},
        {"inside", held.measured >= interval.low && held.measured <= interval.high}};
  }
  if (growth.tokens) {
    object["tokens"] = {{"linear_us", 1e6 * growth.tokens->law.linear},
                        {"quadratic_ns", 1e9 * growth.tokens->law.quadratic},
                        {"tenth_size", finite(growth.tokens->tenth_size)},
                        {"half_size", finite(growth.tokens->half_size)}};
  }
  return object;
}

Json budget_json(const SweepReport& report) {
  if (!report.budget) return nullptr;
  const Budget& budget = *report.budget;
  Json verdicts = Json::array();
  for (const BudgetVerdict& verdict : report.verdicts) {
    verdicts.push_back({{"model", verdict.model},
                        {"threads", verdict.threads},
                        {"largest_size", verdict.largest},
                        {"next_size", verdict.next},
                        {"reason", verdict.reason}});
  }
  return {{"ms", budget.seconds ? Json(1e3 * *budget.seconds) : Json(nullptr)},
          {"quantile", budget.at},
          {"bytes", or_null(budget.bytes)},
          {"verdicts", verdicts}};
}

Json changes_json(const std::vector<Change>& changes) {
  Json all = Json::array();
  for (const Change& change : changes) {
    all.push_back({{"model", change.model},
                   {"size", change.size},
                   {"threads", change.threads},
                   {"ratio", change.ratio},
                   {"interval", interval_json(change.interval)},
                   {"verdict", change.slower()   ? "slower"
                               : change.faster() ? "faster"
                                                 : "same"}});
  }
  return all;
}

Json document_of(const SweepReport& report) {
  const Sweep& sweep = report.sweep;
  Json document = {{"format", "leadsman sweep 1"},
                   {"version", kVersion},
                   {"complete", sweep.complete},
                   {"rounds", sweep.rounds},
                   {"board", board_json(sweep.board)}};
  const auto fill = [&](const char* name, const auto& values, const auto& write) {
    document[name] = Json::array();
    for (const auto& value : values) document[name].push_back(write(value));
  };
  fill("limits", sweep.limits, limits_json);
  fill("points", sweep.points, [&](const SweepPoint& point) { return point_json(point, sweep); });
  fill("growth", report.growth, growth_json);
  document["budget"] = budget_json(report);
  document["changes"] = changes_json(report.changes);
  return document;
}

// Quoted where a comma, a quote or a line end asks for it (RFC 4180).
std::string csv_cell(const Json& value) {
  if (value.is_null()) return "";
  if (!value.is_string()) return value.dump();
  const std::string& text = value.get_ref<const std::string&>();
  if (text.find_first_of(",\"\n\r") == std::string::npos) return text;
  std::string quoted = "\"";
  for (const char c : text) quoted += c == '"' ? std::string("\"\"") : std::string(1, c);
  return quoted + '"';
}

}  // namespace

std::string sweep_json(const SweepReport& report) {
  return document_of(report).dump(2, ' ', false, Json::error_handler_t::replace) + '\n';
}

std::string sweep_csv(const SweepReport& report) {
  const Json points = document_of(report)["points"];
  std::vector<std::string> names;
  for (const Json& point : points) {
    for (const auto& member : point.items()) {
      if (member.value().is_structured()) continue;
      if (std::ranges::find(names, member.key()) == names.end()) names.push_back(member.key());
    }
  }
  std::string text;
  for (const std::string& name : names) text += (text.empty() ? "" : ",") + name;
  for (const Json& point : points) {
    text += '\n';
    for (std::size_t i = 0; i < names.size(); ++i) {
      text += (i > 0 ? "," : "") + csv_cell(point.value(names[i], Json(nullptr)));
    }
  }
  return text + '\n';
}

std::vector<SweepPoint> read_sweep_points(const std::string& json, const std::string& file_name) {
  std::vector<SweepPoint> points;
  try {
    const Json document = Json::parse(json);
    if (document.at("format") != "leadsman sweep 1")
      throw_input(file_name + ": is of another format");
    for (const Json& entry : document.at("points")) {
      SweepPoint point;
      entry.at("model").get_to(point.model);
      entry.at("size").get_to(point.size);
      entry.at("threads").get_to(point.threads);
      if (entry.contains("failure")) continue;
      for (const Json& sample : entry.at("samples_ms")) {
        point.samples.push_back({1e-3 * sample.get<double>(), false, false});
        if (!(point.samples.back().seconds > 0.0)) {
          throw_input(file_name + ": " + point.model + ", size " + std::to_string(point.size) +
                      ": samples_ms: a time is not above 0");
        }
      }
      points.push_back(std::move(point));
    }
  } catch (const Json::exception& error) {
    throw_input(file_name + ": is no JSON that sweep wrote: " + error.what());
  }
  return points;
}

}  // namespace leadsman
