// A profile for people and for programs: what each step and each kind of kernel takes.
#pragma once

#include <ostream>

#include <nlohmann/json.hpp>

#include "leadsman/plan.h"
#include "leadsman/profile.h"

namespace leadsman::cli {

/// Tables by step and by kernel, and what is left for the plan itself. Times are the best of the
/// runs; shares are of the best whole run. `peak` in FLOP/s, as measure_peak() gives it.
void print_profile(std::ostream& out, const Plan& plan, const Profile& profile, double peak);
nlohmann::ordered_json profile_json(const Plan& plan, const Profile& profile, double peak);

}  // namespace leadsman::cli
