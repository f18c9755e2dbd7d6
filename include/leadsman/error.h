// The one exception type of the library.
//
// Every failure that a caller can cause (a wrong argument, a broken file, too little memory) is
// thrown as `Error` with a message that names the file or layer and the place in it. Mistakes
// inside the library are assertions. Nothing in the library prints or ends the process.
#pragma once

#include <stdexcept>
#include <string>

namespace leadsman {

/// What went wrong, in the classes that scripts can act on. The values are the exit codes of the
/// command-line tool.
enum class ErrorKind {
  kUsage = 2,   ///< an argument or option that makes no sense
  kInput = 3,   ///< a file or its contents are missing, broken or contradictory
  kMemory = 4,  ///< not enough memory, or over a stated budget
};

class Error : public std::runtime_error {
 public:
  Error(ErrorKind kind, const std::string& message) : std::runtime_error(message), kind_(kind) {}
  ErrorKind kind() const noexcept { return kind_; }

 private:
  ErrorKind kind_;
};

[[noreturn]] inline void throw_usage(const std::string& message) {
  throw Error(ErrorKind::kUsage, message);
}
[[noreturn]] inline void throw_input(const std::string& message) {
  throw Error(ErrorKind::kInput, message);
}

}  // namespace leadsman
