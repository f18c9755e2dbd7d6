// What a sweep means: growth laws, a budget's verdict, the change since an earlier sweep.
#include <algorithm>
#include <charconv>
#include <cmath>
#include <cstdio>

#include "leadsman/error.h"
#include "leadsman/sweep.h"

namespace leadsman {
namespace {

using Series = std::vector<const SweepPoint*>;

// The points that ran, one series a model and number of threads, by size.
std::vector<Series> series_of(const Sweep& sweep) {
  std::vector<Series> all;
  for (const SweepPoint& point : sweep.points) {
    const auto same = [&](const Series& series) {
      return series.front()->model == point.model && series.front()->threads == point.threads;
    };
    auto found = std::ranges::find_if(all, same);
    if (found == all.end()) found = all.insert(all.end(), Series{});
    found->push_back(&point);
  }
  for (Series& series : all) {
    std::ranges::sort(series, {}, [](const SweepPoint* point) { return point->size; });
  }
  return all;
}

struct Columns {
  std::vector<double> size, seconds, macs, tokens;
};

Columns columns_of(const Series& series) {
  Columns columns;
  for (const SweepPoint* point : series) {
    if (!point->failure.empty()) continue;
    columns.size.push_back(static_cast<double>(point->size));
    columns.seconds.push_back(point->seconds_at(0.5));
    columns.macs.push_back(static_cast<double>(point->macs));
    columns.tokens.push_back(static_cast<double>(point->tokens));
  }
  return columns;
}

Growth::Tokens tokens_of(const Columns& columns) {
  Growth::Tokens tokens{fit_tokens(columns.tokens, columns.seconds), 0.0, 0.0};
  // Tokens grow with the square of the side.
  const auto side = [&](double count) {
    return columns.size.back() * std::sqrt(count / columns.tokens.back());
  };
  tokens.tenth_size = side(tokens.law.tokens_at_share(0.1));
  tokens.half_size = side(tokens.law.tokens_at_share(0.5));
  return tokens;
}

std::string number(double value) {
  char text[32];
  std::snprintf(text, sizeof text, "%.3g", value);
  return text;
}

// Why the point does not fit; empty when it does.
std::string over(const SweepPoint& point, const Budget& budget) {
  if (!point.failure.empty()) return point.failure;
  if (budget.seconds && point.seconds_at(budget.at) > *budget.seconds) {
    return number(1e3 * point.seconds_at(budget.at)) + " ms at p" + number(100.0 * budget.at) +
           ", over " + number(1e3 * *budget.seconds) + " ms";
  }
  constexpr double kMiB = 1024.0 * 1024.0;
  const auto bytes = static_cast<double>(point.memory_bytes());
  if (budget.bytes && bytes > *budget.bytes) {
    return number(bytes / kMiB) + " MiB " + (point.resident ? "resident" : "by the plan") +
           ", over " + number(*budget.bytes / kMiB) + " MiB";
  }
  return "";
}

struct Unit {
  const char* name;
  double factor;
};

// A positive number followed by one of the units.
template <std::size_t count>
std::optional<double> with_unit(std::string_view text, const Unit (&units)[count]) {
  double value = 0.0;
  const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), value);
  if (error != std::errc{} || !(value > 0.0) || !std::isfinite(value)) return std::nullopt;
  const std::string_view unit(end, static_cast<std::size_t>(text.data() + text.size() - end));
  for (const Unit& known : units) {
    if (unit == known.name) return value * known.factor;
  }
  return std::nullopt;
}

}  // namespace

std::vector<Growth> growth_of(const Sweep& sweep) {
  std::vector<Growth> all;
  for (const Series& series : series_of(sweep)) {
    const Columns columns = columns_of(series);
    const std::size_t count = columns.size.size();
    if (count < 3) continue;
    Growth growth;
    growth.model = series.front()->model;
    growth.threads = series.front()->threads;
    growth.time = fit_power(columns.size, columns.seconds);
    growth.macs_exponent = fit_power(columns.size, columns.macs).exponent;
    if (count > 3) {
      const auto but_last = [&](const std::vector<double>& values) {
        return std::span(values).first(count - 1);
      };
      const PowerLaw law = fit_power(but_last(columns.size), but_last(columns.seconds));
      growth.held_out = {static_cast<std::int64_t>(columns.size.back()),
                         predict(law, columns.size.back()), columns.seconds.back()};
    }
    if (columns.tokens.front() > 0.0) growth.tokens = tokens_of(columns);
    all.push_back(growth);
  }
  return all;
}

void parse_time_budget(const std::string& text, Budget& budget) {
  const std::size_t at = std::min(text.find('@'), text.size());
  constexpr Unit kUnits[] = {{"us", 1e-6}, {"ms", 1e-3}, {"s", 1.0}};
  budget.seconds = with_unit(std::string_view(text).substr(0, at), kUnits);
  std::optional<double> percent = 99.0;
  if (at < text.size()) {
    constexpr Unit kNone[] = {{"", 1.0}};
    const std::string_view rank = std::string_view(text).substr(at + 1);
    percent = rank.starts_with('p') ? with_unit(rank.substr(1), kNone) : std::nullopt;
  }
  if (!budget.seconds || !percent || *percent > 100.0) {
    throw_usage("'" + text + "' is no time like 50ms, 50ms@p99 or 0.2s@p50");
  }
  budget.at = *percent / 100.0;
}

void parse_memory_budget(const std::string& text, Budget& budget) {
  constexpr Unit kUnits[] = {{"", 1.0},       {"B", 1.0},  {"KiB", 1024.0}, {"MiB", 0x1p20},
                             {"GiB", 0x1p30}, {"kB", 1e3}, {"MB", 1e6},     {"GB", 1e9}};
  budget.bytes = with_unit(text, kUnits);
  if (!budget.bytes) throw_usage("'" + text + "' is no memory like 64MiB or 1GiB");
}

std::vector<BudgetVerdict> judge_budget(const Sweep& sweep, const Budget& budget) {
  std::vector<BudgetVerdict> verdicts;
  for (const Series& series : series_of(sweep)) {
    BudgetVerdict verdict{series.front()->model, series.front()->threads, 0, 0, ""};
    for (const SweepPoint* point : series) {
      const std::string reason = over(*point, budget);
      if (reason.empty()) {
        verdict.largest = point->size;
        verdict.next = 0;
        verdict.reason.clear();
      } else if (verdict.next == 0) {
        verdict.next = point->size;
        verdict.reason = reason;
      }
    }
    verdicts.push_back(verdict);
  }
  return verdicts;
}

std::vector<Change> compare_sweeps(const std::vector<SweepPoint>& earlier, const Sweep& today) {
  std::vector<std::pair<const SweepPoint*, const SweepPoint*>> pairs;
  for (const SweepPoint& point : today.points) {
    const auto same = [&](const SweepPoint& other) {
      return other.model == point.model && other.size == point.size &&
             other.threads == point.threads && !other.samples.empty();
    };
    const auto found = std::ranges::find_if(earlier, same);
    if (found != earlier.end() && !point.samples.empty()) pairs.emplace_back(&*found, &point);
  }
  if (pairs.empty()) throw_usage("the earlier sweep has no model, size and threads of this one");
  constexpr int kResamples = 4000;
  const double confidence = 1.0 - 0.05 / static_cast<double>(pairs.size());
  std::vector<Change> changes;
  for (const auto& [before, now] : pairs) {
    changes.push_back(
        {now->model, now->size, now->threads, now->seconds_at(0.5) / before->seconds_at(0.5),
         bootstrap_median_ratio(now->seconds(), before->seconds(), confidence, kResamples, 1)});
  }
  return changes;
}

}  // namespace leadsman
