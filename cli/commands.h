// The commands. Each registers itself with the parser; when it was chosen, its function runs and
// gives the exit code: 0 done, 1 a finding. Errors are thrown (error.h) and become 2, 3 or 4.
#pragma once

#include <functional>

#include <CLI/CLI.hpp>

namespace leadsman::cli {

using Command = std::function<int()>;

Command add_describe(CLI::App& app);
Command add_classify(CLI::App& app);
Command add_tap(CLI::App& app);
Command add_verify(CLI::App& app);
Command add_time(CLI::App& app);
Command add_sweep(CLI::App& app);
Command add_import(CLI::App& app);

}  // namespace leadsman::cli
