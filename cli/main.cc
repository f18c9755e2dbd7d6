// leadsman: parses the command line, calls one command, turns errors into exit codes.
#include <csignal>
#include <iostream>
#include <new>

#include "commands.h"
#include "leadsman/error.h"
#include "leadsman/version.h"

namespace {

int report(const std::string& message, leadsman::ErrorKind kind) {
  std::cerr << "leadsman: " << message << '\n';
  return static_cast<int>(kind);
}

}  // namespace

int main(int argc, char** argv) {
  using leadsman::ErrorKind;
  // A reader that goes away (`leadsman describe ... | head`) ends the process quietly.
  std::signal(SIGPIPE, SIG_DFL);

  CLI::App app{"Runs image classifiers on boards without a GPU and shows every layer.", "leadsman"};
  app.set_version_flag("--version", std::string("leadsman ") + leadsman::kVersion);
  app.require_subcommand(0, 1);  // 1 would hide which word is no command
  app.footer(
      "A classifier's answer is not a safety function.\n"
      "Exit codes: 0 done, 1 a finding, 2 wrong usage, 3 bad input file, 4 not enough memory.\n"
      "Each command has its own --help with an example.");
  std::vector<std::pair<CLI::App*, leadsman::cli::Command>> commands;
  const auto add = [&](leadsman::cli::Command (*adder)(CLI::App&)) {
    leadsman::cli::Command command = adder(app);
    commands.emplace_back(app.get_subcommands({}).back(), std::move(command));
  };
  add(leadsman::cli::add_describe);
  add(leadsman::cli::add_classify);
  add(leadsman::cli::add_tap);
  add(leadsman::cli::add_verify);
  add(leadsman::cli::add_time);
  add(leadsman::cli::add_sweep);
  add(leadsman::cli::add_import);

  try {
    app.parse(argc, argv);
    for (const auto& [subcommand, command] : commands) {
      if (subcommand->parsed()) {
        const int code = command();
        std::cout.flush();
        if (!std::cout) return report("cannot write to standard output", ErrorKind::kInput);
        return code;
      }
    }
    std::cerr << app.help();
    return static_cast<int>(ErrorKind::kUsage);
  } catch (const CLI::ParseError& error) {
    if (error.get_exit_code() == 0) return app.exit(error);
    return report(std::string(error.what()) + "\n(leadsman COMMAND --help shows how)",
                  ErrorKind::kUsage);
  } catch (const leadsman::Error& error) {
    std::cout.flush();
    return report(error.what(), error.kind());
  } catch (const std::bad_alloc&) {
    return report("not enough memory", ErrorKind::kMemory);
  }
}
