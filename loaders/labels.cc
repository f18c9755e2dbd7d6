// labels.txt: one class name a line.
#include <string>
#include <string_view>
#include <vector>

#include "leadsman/bundle.h"
#include "leadsman/error.h"
#include "loaders/bundle_files.h"
#include "loaders/mapped_file.h"
#include "loaders/text.h"

namespace leadsman {
namespace {

constexpr std::size_t kMaxLabelBytes = 1024;
constexpr std::size_t kMaxLabels = 1'000'000;
constexpr std::string_view kByteOrderMark = "\xef\xbb\xbf";

}  // namespace

std::vector<std::string> parse_labels(std::string_view text, const std::string& file_name) {
  if (text.size() > loaders::kMaxLabelsBytes) {
    throw_input(file_name + ": holds " + std::to_string(text.size()) + " bytes, at most " +
                std::to_string(loaders::kMaxLabelsBytes) + " are read");
  }
  if (text.starts_with(kByteOrderMark)) text.remove_prefix(kByteOrderMark.size());
  std::vector<std::string> labels;
  std::size_t line = 0;
  std::size_t first_blank = 0;
  while (!text.empty()) {
    ++line;
    const std::size_t newline = text.find('\n');
    std::string_view label = text.substr(0, newline);
    text.remove_prefix(newline == std::string_view::npos ? text.size() : newline + 1);
    if (label.ends_with('\r')) label.remove_suffix(1);
    const std::string place = file_name + ": line " + std::to_string(line) + ": ";
    if (label.find_first_not_of(' ') == std::string_view::npos) {
      if (first_blank == 0) first_blank = line;
      continue;
    }
    if (first_blank != 0) {
      throw_input(file_name + ": line " + std::to_string(first_blank) +
                  ": is blank, and labels follow it");
    }
    if (label.size() > kMaxLabelBytes) {
      throw_input(place + "a label of " + std::to_string(label.size()) + " bytes; at most " +
                  std::to_string(kMaxLabelBytes) + " are read");
    }
    if (const auto at = loaders::find_invalid_utf8(label)) {
      throw_input(place + "is not UTF-8 from byte " + std::to_string(*at + 1) + ": " +
                  loaders::in_quotes(label));
    }
    if (loaders::find_control_character(label)) {
      throw_input(place + "a control character in " + loaders::in_quotes(label));
    }
    if (labels.size() == kMaxLabels) {
      throw_input(file_name + ": holds more than " + std::to_string(kMaxLabels) + " labels");
    }
    labels.emplace_back(label);
  }
  return labels;
}

std::vector<std::string> load_labels(const std::string& path) {
  return parse_labels(loaders::read_text_file(path, loaders::kMaxLabelsBytes), path);
}

}  // namespace leadsman
