#include <algorithm>
#include <cmath>
#include <iostream>

#include <nlohmann/json.hpp>

#include "commands.h"
#include "leadsman/compare.h"
#include "leadsman/error.h"
#include "leadsman/tensor_file.h"
#include "options.h"
#include "text.h"

namespace leadsman::cli {
namespace {

struct VerifyOptions {
  ModelOptions model;
  std::string reference;
  std::string mode = "isolated";
  bool json = false;
};

using Json = nlohmann::ordered_json;

// JSON has no infinity: null says that the figure is none.
Json number(double value) {
  return std::isfinite(value) ? Json(value) : Json(nullptr);
}

void print_json(const Comparison& comparison, const VerifyOptions& options) {
  Json document;
  document["bundle"] = options.model.bundle;
  document["reference"] = options.reference;
  document["mode"] = options.mode;
  document["accuracy"] = options.model.accuracy;
  document["layers"] = Json::array();
  for (const LayerComparison& layer : comparison.layers) {
    Json row = {{"layer", layer.layer},
                {"operator", layer.operator_name},
                {"kernel", layer.kernel},
                {"relative_l2", number(layer.relative_l2)},
                {"max_over_rms", number(layer.max_over_rms)},
                {"cosine", number(layer.cosine)},
                {"threshold", number(layer.threshold)},
                {"ratio", number(layer.ratio)},
                {"departs", layer.departs}};
    if (!layer.remark.empty()) row["remark"] = layer.remark;
    document["layers"].push_back(std::move(row));
  }
  document["missing"] = comparison.missing;
  document["first_departure"] =
      comparison.first_departure.empty() ? Json(nullptr) : Json(comparison.first_departure);
  document["worst_ratio"] = number(comparison.worst_ratio);
  document["worst_layer"] = comparison.worst_layer;
  document["output_relative_l2"] = number(comparison.output_relative_l2);
  std::cout << document.dump(2) << '\n';
}

// Half decades below the threshold: "#######..." is 1.5 decades short of departing.
std::string gauge(double ratio) {
  constexpr int kLength = 10;
  const double decades = ratio > 0.0 ? std::log10(ratio) : -100.0;
  const int filled =
      std::isfinite(decades)
          ? static_cast<int>(std::clamp(kLength + std::floor(2.0 * decades), 0.0, 1.0 * kLength))
          : (ratio > 0.0 ? kLength : 0);
  return std::string(static_cast<std::size_t>(filled), '#') +
         std::string(static_cast<std::size_t>(kLength - filled), '.');
}

void print_table(const Comparison& comparison, const VerifyOptions& options) {
  using Align = Table::Align;
  Table table({{"depth", Align::kRight},
               {"layer", Align::kLeft, true},
               {"operator"},
               {"error", Align::kRight},
               {"allowed", Align::kRight},
               {"ratio", Align::kRight},
               {"to the limit"},
               {""}});
  for (std::size_t i = 0; i < comparison.layers.size(); ++i) {
    const LayerComparison& layer = comparison.layers[i];
    std::vector<std::string> cells{
        std::to_string(i + 1),      layer.layer,
        layer.operator_name,        digits(layer.relative_l2, 2),
        digits(layer.threshold, 2), digits(layer.ratio, 2),
        gauge(layer.ratio),         layer.departs ? "DEPARTS " + layer.remark : ""};
    if (layer.departs) {
      table.add_emphasized(std::move(cells));
    } else {
      table.add(std::move(cells));
    }
  }
  table.print(std::cout);
  std::size_t departures = 0;
  for (const LayerComparison& layer : comparison.layers) departures += layer.departs ? 1 : 0;
  std::cout << '\n'
            << comparison.layers.size() << " layers compared (" << options.mode << "), "
            << departures << " depart";
  if (!comparison.missing.empty()) {
    std::cout << "; " << comparison.missing.size() << " are not in the reference";
  }
  if (const auto count = std::ranges::count_if(comparison.layers, [](const LayerComparison& layer) {
        return layer.kernel.starts_with("winograd");
      })) {
    std::cout << "; " << count << " in fewer multiplications";
  }
  std::cout << "\nnearest to its limit: " << comparison.worst_layer << ", at "
            << digits(comparison.worst_ratio, 2) << " of it\n"
            << "output of the whole run: relative error "
            << digits(comparison.output_relative_l2, 2) << '\n';
  if (!comparison.first_departure.empty()) {
    std::cout << emphasize("first departure: " + comparison.first_departure) << '\n';
  }
}

}  // namespace

Command add_verify(CLI::App& app) {
  CLI::App* command =
      app.add_subcommand("verify", "Compare every layer with what the training framework computed");
  auto options = std::make_shared<VerifyOptions>();
  options->model.add_to(*command, /*with_size=*/false);  // the reference's input sets it
  command
      ->add_option("--reference", options->reference,
                   "Tensors of another library (default: reference.safetensors in the bundle)")
      ->type_name("FILE");
  command
      ->add_option("--mode", options->mode,
                   "isolated: each layer gets the reference's inputs; chained: ours flow on")
      ->check(CLI::IsMember({"isolated", "chained"}));
  command->add_flag("--json", options->json, "One JSON object");
  command->footer("Example: leadsman verify examples/buttons/bundles/conv --mode chained");
  return [options] {
    const Bundle model = load_bundle(options->model.bundle);
    if (options->reference.empty()) options->reference = model.reference_path;
    if (options->reference.empty()) {
      throw_usage(options->model.bundle + " holds no reference.safetensors; give --reference FILE");
    }
    const TensorFile file = TensorFile::open(options->reference);
    const ReferenceSource source = [&](const std::string& name) -> std::optional<Tensor> {
      if (!file.has(name)) return std::nullopt;
      return file.read(name);
    };
    CompareOptions compare_options;
    compare_options.mode =
        options->mode == "chained" ? CompareMode::kChained : CompareMode::kIsolated;
    compare_options.threads = options->model.threads;
    compare_options.accuracy = options->model.parsed_accuracy();
    compare_options.reference_kernels = options->model.oracle;
    Comparison comparison;
    {
      Progress progress("comparing layer");
      compare_options.progress = [&](std::size_t done, std::size_t total) {
        progress.show(done, total);
      };
      try {
        comparison = compare(model.graph, model.weights, source, compare_options);
      } catch (const Error& error) {
        // Shapes that do not fit the graph come from the file here, not from the command line.
        throw Error(error.kind() == ErrorKind::kUsage ? ErrorKind::kInput : error.kind(),
                    options->reference + ": " + error.what());
      }
    }
    if (options->json) {
      print_json(comparison, *options);
    } else {
      print_table(comparison, *options);
    }
    return comparison.first_departure.empty() ? 0 : 1;
  };
}

}  // namespace leadsman::cli
