// The comparison of a picture's stages as a table and as JSON.
#pragma once

#include <iosfwd>
#include <string>
#include <vector>

#include <nlohmann/json.hpp>

#include "leadsman/compare_picture.h"

namespace leadsman::cli {

/// The table, and below it what to make of it. `labels` may be empty.
void print_picture(std::ostream& out, const PictureComparison& comparison,
                   const std::vector<std::string>& labels);
/// What is not finite becomes null when it is written.
nlohmann::ordered_json picture_json(const PictureComparison& comparison, const std::string& file,
                                    const std::vector<std::string>& labels);

}  // namespace leadsman::cli
