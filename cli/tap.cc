#include <algorithm>
#include <filesystem>
#include <iostream>

#include "commands.h"
#include "leadsman/error.h"
#include "leadsman/maps.h"
#include "leadsman/names.h"
#include "leadsman/runner.h"
#include "leadsman/tensor_file.h"
#include "options.h"
#include "text.h"

namespace leadsman::cli {
namespace {

namespace fs = std::filesystem;

struct TapOptions {
  ModelOptions model;
  std::string picture;
  std::string tensor;
  std::string layers;
  std::string out;
  std::string sheets;
  std::string heads;
  std::int64_t query = 0;
};

// Layer names become file names.
fs::path file_in(const std::string& folder, const std::string& layer) {
  std::string name = layer;
  std::ranges::replace_if(
      name, [](char c) { return c == '/' || c == '\\' || c == ':'; }, '_');
  return fs::path(folder) / (name + ".png");
}

void make_folder(const std::string& folder) {
  std::error_code error;
  fs::create_directories(folder, error);
  if (error) throw_input(folder + ": cannot be made: " + error.message());
}

// The patch grid that the tokens came from: the input of the graph's image_to_tokens.
std::optional<PictureSize> patch_grid(const Graph& graph, const Plan& plan) {
  for (const Layer& layer : graph.layers) {
    if (layer.operator_name != "image_to_tokens") continue;
    const auto map = std::ranges::find(plan.layers(), layer.inputs[0], &LayerSummary::name);
    if (map != plan.layers().end()) return PictureSize{map->shape[2], map->shape[3]};
  }
  return std::nullopt;
}

class Tapper {
 public:
  explicit Tapper(const TapOptions& options)
      : options_(options), model_(load_bundle(options.model.bundle)) {}

  int run() {
    if (options_.out.empty() && options_.sheets.empty() && options_.heads.empty()) {
      throw_usage("say where to: --out FILE, --sheets FOLDER or --heads FOLDER");
    }
    capture();
    if (!options_.out.empty()) {
      write_tensors(options_.out, captured_);
      std::cout << options_.out << ": " << captured_.size() << " layers\n";
    }
    if (!options_.sheets.empty()) draw_sheets();
    if (!options_.heads.empty()) draw_heads();
    return 0;
  }

 private:
  void capture() {
    const Tensor input = read_input(model_, options_.model, options_.picture, options_.tensor);
    const std::vector<std::string> wanted = split_list(options_.layers);
    const bool saves = !options_.out.empty() || !options_.sheets.empty();
    if (saves && wanted.empty()) throw_usage("--layers names no layer");
    PlanOptions plan = options_.model.plan_options(model_);
    plan.input_shapes = {input.shape()};
    if (saves) plan.observe = wanted;
    if (!options_.heads.empty()) plan.observe.emplace_back("*:weights");
    const auto made = Plan::make(model_.graph, model_.weights, plan);
    patches_ = patch_grid(model_.graph, *made);
    Runner runner(made);
    runner.add_hook("*", [&](const HookedOutput& hooked) {
      const std::string& name = hooked.layer();
      const bool is_weights = name.ends_with(":weights");
      if (is_weights && !options_.heads.empty()) weights_.emplace_back(name, hooked.read());
      const bool asked = std::ranges::any_of(wanted, [&](const std::string& pattern) {
        return (pattern.find(':') != std::string::npos) == is_weights &&
               matches_glob(pattern, name);
      });
      if (saves && asked) captured_.emplace_back(name, hooked.read());
    });
    runner.run(input);
  }

  std::optional<TokenGrid> grid_for(const Tensor& tensor) const {
    if (tensor.shape().rank() != 3) return std::nullopt;
    return token_grid(tensor.shape()[1], patches_);
  }

  void draw_sheets() const {
    make_folder(options_.sheets);
    for (const auto& [name, tensor] : captured_) {
      const fs::path path = file_in(options_.sheets, name);
      const ChannelSheet sheet = channel_sheet(tensor, 0, grid_for(tensor));
      write_png(path, sheet.picture);
      std::cout << path.string() << ": " << sheet.channels << " channels, " << sheet.columns
                << " a row, colours end at " << digits(sheet.full_scale, 3) << '\n';
    }
  }

  void draw_heads() const {
    if (options_.picture.empty()) throw_usage("--heads needs a picture to draw over");
    if (weights_.empty()) throw_usage("--heads: the model has no attention layer");
    make_folder(options_.heads);
    const Preprocess settings = preprocessing(model_, options_.model);
    const Picture seen =
        preprocess_stages(read_picture(options_.picture, settings.orientation), settings).cropped;
    for (const auto& [name, tensor] : weights_) {
      const fs::path path = file_in(options_.heads, name);
      const TokenGrid grid = token_grid(tensor.shape()[3], patches_);
      write_png(path, attention_sheet(tensor, 0, options_.query, grid, seen));
      std::cout << path.string() << ": " << tensor.shape()[1] << " heads and their mean, token "
                << options_.query << " of " << tensor.shape()[2] << '\n';
    }
  }

  const TapOptions& options_;
  Bundle model_;
  std::optional<PictureSize> patches_;
  NamedTensors captured_;
  NamedTensors weights_;
};

}  // namespace

Command add_tap(CLI::App& app) {
  CLI::App* command =
      app.add_subcommand("tap", "Save and draw what chosen layers compute for one picture");
  auto options = std::make_shared<TapOptions>();
  options->model.add_to(*command);
  command->add_option("PICTURE", options->picture, "JPEG, PNG, BMP or PNM file");
  command->add_option("--tensor", options->tensor, "A ready input [N,C,H,W] instead of a picture")
      ->type_name("FILE.npy");
  command
      ->add_option("--layers", options->layers,
                   "Names or patterns (* and ?), by commas; NAME:weights for attention weights")
      ->type_name("GLOB,...");
  command->add_option("--out", options->out, "Arrays by layer name, float32, logical order")
      ->type_name("FILE.npz|.safetensors");
  command->add_option("--sheets", options->sheets, "A PNG of every channel for each layer")
      ->type_name("FOLDER");
  command
      ->add_option("--heads", options->heads,
                   "A PNG of every head over the picture, for every attention layer")
      ->type_name("FOLDER");
  command->add_option("--query", options->query, "Token that --heads looks from (0: class token)")
      ->type_name("TOKEN");
  command->footer(
      "Example: leadsman tap examples/buttons/bundles/vit "
      "examples/buttons/pictures/odd/PICTURE \\\n"
      "           --layers 'blocks.*' --out layers.npz --heads heads");
  return [options] { return Tapper(*options).run(); };
}

}  // namespace leadsman::cli
