// A sweep for people at a terminal.
#pragma once

#include <iosfwd>

#include <nlohmann/json.hpp>

namespace leadsman::cli {

/// Tables of what sweep_json() (leadsman/sweep_report.h) wrote, 80 columns wide.
void print_sweep(std::ostream& out, const nlohmann::ordered_json& document);

}  // namespace leadsman::cli
