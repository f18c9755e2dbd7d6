// A sweep written down: JSON for programs, CSV for spreadsheets, one page for people.
#pragma once

#include <string>
#include <vector>

#include "leadsman/sweep.h"

namespace leadsman {

/// A sweep with what was concluded from it.
struct SweepReport {
  Sweep sweep;
  std::vector<Growth> growth;
  std::optional<Budget> budget;
  std::vector<BudgetVerdict> verdicts;
  std::vector<Change> changes;
};

/// All of it. Times are in milliseconds, memory in bytes, rates in GFLOP/s and GB/s (10^9).
std::string sweep_json(const SweepReport& report);
/// One row a point: the scalar members of the JSON's "points", spelled as there.
std::string sweep_csv(const SweepReport& report);
/// One self-contained page of HTML; every figure on it is one of `json`, which sweep_json() wrote.
std::string sweep_page(const std::string& json);

/// The points of a JSON that sweep_json() wrote, with what compare_sweeps() needs: names and times.
/// Throws Error(kInput) naming `file_name` and the place in it.
std::vector<SweepPoint> read_sweep_points(const std::string& json, const std::string& file_name);

}  // namespace leadsman
