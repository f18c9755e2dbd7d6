// The models of a sweep, and the memory that each takes in a process of its own.
#pragma once

#include <optional>
#include <string>
#include <vector>

#include "leadsman/sweep.h"

namespace leadsman::cli {

/// A bundle's path, or the name of an architecture, which gets weights of seed 1. Throws Error.
SweepModel load_sweep_model(const std::string& argument);
/// All of them, named apart: by the last part of the path, else by the whole argument.
std::vector<SweepModel> load_sweep_models(const std::vector<std::string>& arguments);

/// Loads, plans and runs the model in this process; prints ResidentMemory as two numbers.
int print_resident(const std::string& argument, std::int64_t size, int threads, Accuracy accuracy);
/// The same in a new process of this program; nothing when that fails.
std::optional<ResidentMemory> resident_of(const std::string& argument, std::int64_t size,
                                          int threads, Accuracy accuracy);

}  // namespace leadsman::cli
