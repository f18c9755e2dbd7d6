// Which pictures a command line names.
#pragma once

#include <string>
#include <vector>

namespace leadsman::cli {

/// Files as given; folders stand for the .jpg, .jpeg, .png, .bmp, .ppm, .pgm and .pnm files in
/// them, by name, not deeper; "-" for paths on stdin, one a line. Throws Error(kInput) for a folder
/// that cannot be read or holds no picture, and for a list that is empty.
std::vector<std::string> expand_pictures(const std::vector<std::string>& arguments);

}  // namespace leadsman::cli
