#include <algorithm>
#include <cmath>
#include <iostream>

#include <nlohmann/json.hpp>

#include "commands.h"
#include "leadsman/compare.h"
#include "leadsman/compare_picture.h"
#include "leadsman/error.h"
#include "leadsman/tensor_file.h"
#include "options.h"
#include "picture_text.h"
#include "text.h"

namespace leadsman::cli {
namespace {

struct VerifyOptions {
  ModelOptions model;
  std::string reference;
  std::string image;
  std::string mode = "isolated";
  bool json = false;
};

using Json = nlohmann::ordered_json;

// What is not finite becomes null.
void print_json(const Comparison& comparison, const Json& picture, const VerifyOptions& options) {
  Json document;
  document["bundle"] = options.model.bundle;
  document["reference"] = options.reference;
  document["mode"] = options.mode;
  document["accuracy"] = options.model.accuracy;
  if (!picture.is_null()) document["picture"] = picture;
  document["layers"] = Json::array();
  for (const LayerComparison& layer : comparison.layers) {
    Json row = {{"layer", layer.layer},
                {"operator", layer.operator_name},
                {"kernel", layer.kernel},
                {"relative_l2", layer.relative_l2},
                {"max_over_rms", layer.max_over_rms},
                {"cosine", layer.cosine},
                {"threshold", layer.threshold},
                {"ratio", layer.ratio},
                {"departs", layer.departs}};
    if (!layer.remark.empty()) row["remark"] = layer.remark;
    document["layers"].push_back(std::move(row));
  }
  document["missing"] = comparison.missing;
  document["first_departure"] =
      comparison.first_departure.empty() ? Json(nullptr) : Json(comparison.first_departure);
  document["worst_ratio"] = comparison.worst_ratio;
  document["worst_layer"] = comparison.worst_layer;
  document["output_relative_l2"] = comparison.output_relative_l2;
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

class Verifier {
 public:
  explicit Verifier(const VerifyOptions& options)
      : options_(options), model_(load_bundle(options.model.bundle)) {
    if (options_.reference.empty()) options_.reference = model_.reference_path;
    if (options_.reference.empty()) {
      throw_usage(options_.model.bundle + " holds no reference.safetensors; give --reference FILE");
    }
  }

  int run() {
    const TensorFile file = TensorFile::open(options_.reference);
    const ReferenceSource source = [&](const std::string& name) -> std::optional<Tensor> {
      if (!file.has(name)) return std::nullopt;
      return file.read(name);
    };
    std::optional<PictureComparison> picture;
    if (!options_.image.empty()) picture = compare_stages(source);
    const Comparison layers = compare_layers(source);
    if (options_.json) {
      print_json(layers, picture ? picture_json(*picture, options_.image, model_.labels) : Json(),
                 options_);
    } else {
      if (picture) {
        print_picture(std::cout, *picture, model_.labels);
        std::cout << '\n';
      }
      print_table(layers, options_);
    }
    const bool departs =
        !layers.first_departure.empty() || (picture && !picture->first_departure.empty());
    return departs ? 1 : 0;
  }

 private:
  // Shapes that do not fit the graph come from the file here, not from the command line.
  template <typename Function>
  auto blaming_reference(const Function& function) const {
    try {
      return function();
    } catch (const Error& error) {
      throw Error(error.kind() == ErrorKind::kUsage ? ErrorKind::kInput : error.kind(),
                  options_.reference + ": " + error.what());
    }
  }

  PictureComparison compare_stages(const ReferenceSource& source) const {
    if (!model_.preprocess) {
      throw_input(options_.model.bundle + ": graph.json has no 'preprocess' to compare");
    }
    const Picture decoded = read_picture(options_.image, model_.preprocess->orientation);
    PictureCompareOptions options;
    options.decoder_levels = is_jpeg(options_.image) ? kJpegDecoderLevels : 0;
    options.plan.threads = options_.model.threads;
    options.plan.accuracy = options_.model.parsed_accuracy();
    options.plan.reference_kernels = options_.model.oracle;
    return blaming_reference([&] {
      return compare_picture(decoded, *model_.preprocess, model_.graph, model_.weights, source,
                             options);
    });
  }

  Comparison compare_layers(const ReferenceSource& source) const {
    Progress progress("comparing layer");
    CompareOptions options;
    options.mode = options_.mode == "chained" ? CompareMode::kChained : CompareMode::kIsolated;
    options.threads = options_.model.threads;
    options.accuracy = options_.model.parsed_accuracy();
    options.reference_kernels = options_.model.oracle;
    options.progress = [&](std::size_t done, std::size_t total) { progress.show(done, total); };
    return blaming_reference(
        [&] { return compare(model_.graph, model_.weights, source, options); });
  }

  VerifyOptions options_;
  Bundle model_;
};

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
      ->add_option("--image", options->image,
                   "The picture that the reference was made from: compare its stages, too")
      ->type_name("FILE");
  command
      ->add_option("--mode", options->mode,
                   "isolated: each layer gets the reference's inputs; chained: ours flow on")
      ->check(CLI::IsMember({"isolated", "chained"}));
  command->add_flag("--json", options->json, "One JSON object");
  command->footer(
      "Example: leadsman verify examples/buttons/bundles/conv --mode chained\n"
      "         leadsman verify examples/buttons/bundles/vit \\\n"
      "             --image examples/buttons/pictures/odd/walnut_shield_14.jpg");
  return [options] { return Verifier(*options).run(); };
}

}  // namespace leadsman::cli
