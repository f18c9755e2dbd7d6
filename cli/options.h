// Options that several commands share, and what they stand for.
#pragma once

#include <string>

#include <CLI/CLI.hpp>

#include "leadsman/bundle.h"
#include "leadsman/plan.h"

namespace leadsman::cli {

/// {height, width} of "HxW" or "S"; {0, 0} of "". Throws Error(kUsage).
std::pair<std::int64_t, std::int64_t> parse_size(const std::string& size);

struct ModelOptions {
  std::string bundle;
  std::string size;  ///< "HxW", "S" or empty
  int threads = 0;
  std::string accuracy = "fast";
  bool oracle = false;

  void add_to(CLI::App& command, bool with_size = true);
  std::pair<std::int64_t, std::int64_t> parsed_size() const { return parse_size(size); }
  Accuracy parsed_accuracy() const {
    return accuracy == "exact" ? Accuracy::kExact : Accuracy::kFast;
  }
  PlanOptions plan_options(const Bundle& model) const;
};

/// Picture-to-input conversion at the model's size (the bundle's preprocess, scaled by --size).
/// Throws Error(kInput) when the bundle has none.
Preprocess preprocessing(const Bundle& model, const ModelOptions& options);

/// The input of the first graph input: [N, C, H, W] from --tensor, or a picture preprocessed.
Tensor read_input(const Bundle& model, const ModelOptions& options, const std::string& picture,
                  const std::string& tensor);

/// "a,b,c" without empty parts.
std::vector<std::string> split_list(const std::string& text);

}  // namespace leadsman::cli
