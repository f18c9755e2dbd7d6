// Names of layers and tensors: nearest spelling, and patterns.
#pragma once

#include <string>
#include <string_view>
#include <vector>

namespace leadsman {

/// The candidate that needs the fewest edits to become `name` (Levenshtein distance), or empty
/// when none is within half its length.
std::string nearest_name(std::string_view name, const std::vector<std::string>& candidates);

/// Shell-like match: `*` stands for any run of characters (dots too), `?` for one.
bool matches_glob(std::string_view pattern, std::string_view name);

}  // namespace leadsman
