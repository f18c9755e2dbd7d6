#pragma once

namespace leadsman {

/// Version of the library, as in CMakeLists.txt and CHANGELOG.md.
inline constexpr const char* kVersion = "0.1.0";

}  // namespace leadsman
