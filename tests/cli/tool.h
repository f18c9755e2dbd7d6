// Runs the built command-line tool as a shell would.
#pragma once

#include <cstdlib>
#include <string>
#include <vector>

#include <sys/wait.h>

#include "tests/support/files.h"

namespace leadsman::testing {

inline const std::string kButtons = std::string(LEADSMAN_SOURCE_DIR) + "/examples/buttons";
inline const std::string kConv = kButtons + "/bundles/conv";
inline const std::string kVit = kButtons + "/bundles/vit";

struct ToolResult {
  int exit_code = -1;  ///< 128 + signal when it was killed
  std::string out;
  std::string err;
};

inline std::string shell_quoted(const std::string& text) {
  std::string quoted = "'";
  for (const char c : text) quoted += c == '\'' ? std::string("'\\''") : std::string(1, c);
  return quoted + "'";
}

/// `environment` like "COLUMNS=80"; `standard_input` is what the tool reads there.
inline ToolResult run_tool(const std::vector<std::string>& arguments,
                           const std::string& standard_input = "",
                           const std::string& environment = "") {
  const ScratchFolder scratch;
  write_file(scratch / "in", standard_input);
  std::string command = environment + " " + shell_quoted(LEADSMAN_TOOL);
  for (const std::string& argument : arguments) command += " " + shell_quoted(argument);
  command += " <" + (scratch / "in") + " >" + (scratch / "out") + " 2>" + (scratch / "err");
  const int status = std::system(command.c_str());
  return {WIFEXITED(status) ? WEXITSTATUS(status) : 128 + WTERMSIG(status),
          read_file(scratch / "out"), read_file(scratch / "err")};
}

}  // namespace leadsman::testing
