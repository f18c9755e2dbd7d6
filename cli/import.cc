#include <charconv>
#include <filesystem>
#include <iostream>
#include <optional>

#include <nlohmann/json.hpp>

#include "commands.h"
#include "leadsman/architectures.h"
#include "leadsman/error.h"
#include "options.h"
#include "text.h"

namespace leadsman::cli {
namespace {

struct ImportCommandOptions {
  std::string checkpoint;
  std::string architecture;
  std::string seed;
  std::optional<std::int64_t> classes;
  std::string size;
  std::string labels;
  std::string ignore;
  std::string out;
  bool list = false;
  bool json = false;
};

using Json = nlohmann::ordered_json;

int list_architectures(bool json) {
  using Align = Table::Align;
  Table table({{"architecture"},
               {"parameters", Align::kRight},
               {"MACs", Align::kRight},
               {"published in", Align::kLeft, true}});
  Json document = Json::array();
  for (const std::string& name : architecture_names()) {
    const Architecture built = build_architecture(name);
    table.add(
        {name, grouped(built.parameters), scaled(static_cast<double>(built.macs)), built.source});
    document.push_back({{"architecture", name},
                        {"parameters", built.parameters},
                        {"macs", built.macs},
                        {"source", built.source}});
  }
  if (json) {
    std::cout << document.dump(2) << '\n';
    return 0;
  }
  table.print(std::cout);
  std::cout << "\nwith 1000 classes, for one picture of 224x224\n";
  return 0;
}

void check_options(const ImportCommandOptions& options) {
  if (options.architecture.empty()) {
    throw_usage("say which architecture: --architecture NAME (--list shows them)");
  }
  if (options.checkpoint.empty() && options.seed.empty()) {
    throw_usage("give a checkpoint, or --seed N for untrained weights");
  }
  if (!options.checkpoint.empty() && !options.seed.empty()) {
    throw_usage("give a checkpoint or --seed, not both");
  }
  if (options.checkpoint.empty() && !options.ignore.empty()) {
    throw_usage("--ignore wants a checkpoint");
  }
  if (options.out.empty()) throw_usage("say where to: --out FOLDER");
  // The checkpoint would be replaced by the part of it that the bundle keeps.
  for (const std::string& written : {options.out, options.out + "/weights.safetensors"}) {
    std::error_code different;
    if (std::filesystem::equivalent(options.checkpoint, written, different)) {
      throw_usage("--out: " + options.out + " would replace the checkpoint itself");
    }
  }
}

std::optional<PictureSize> size_option(const ImportCommandOptions& options) {
  if (options.size.empty()) return std::nullopt;
  const auto [height, width] = parse_size(options.size);
  return PictureSize{height, width};
}

std::uint64_t parse_seed(const std::string& text) {
  std::uint64_t seed = 0;
  const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), seed);
  if (error != std::errc{} || end != text.data() + text.size()) {
    throw_usage("--seed: '" + text + "' is no number from 0 to 18446744073709551615");
  }
  return seed;
}

Bundle seeded_bundle(const ImportCommandOptions& options, std::size_t labels) {
  const std::uint64_t seed = parse_seed(options.seed);
  ArchitectureOptions wanted;
  if (labels > 0) wanted.classes = static_cast<std::int64_t>(labels);
  if (options.classes) wanted.classes = *options.classes;
  wanted.size = size_option(options).value_or(wanted.size);
  const Architecture built = build_architecture(options.architecture, wanted);
  Bundle bundle;
  bundle.graph = built.graph;
  bundle.weights = seeded_weights(built, seed);
  bundle.preprocess = built.preprocess;
  return bundle;
}

Bundle checkpoint_bundle(const ImportCommandOptions& options) {
  ImportOptions wanted;
  wanted.classes = options.classes;
  wanted.size = size_option(options);
  wanted.ignore = split_list(options.ignore);
  return import_checkpoint(options.architecture, options.checkpoint, wanted);
}

void report(const Bundle& bundle, const ImportCommandOptions& options) {
  // The reference kernels take weights as they are, so this plan is made in no time.
  const auto plan =
      Plan::make(bundle.graph, bundle.weights,
                 {.input_shapes = {}, .threads = 1, .reference_kernels = true, .observe = {}});
  const Shape& input = plan->input_shapes().front();
  const std::int64_t classes = plan->layers().back().shape[1];
  if (options.json) {
    const Json document = {{"bundle", options.out},        {"architecture", options.architecture},
                           {"classes", classes},           {"labels", bundle.labels.size()},
                           {"size", {input[2], input[3]}}, {"parameters", plan->parameters()},
                           {"macs", plan->macs()}};
    std::cout << document.dump(2) << '\n';
    return;
  }
  const auto line = [](const char* what, const std::string& value) {
    std::cout << "  " << what << value << '\n';
  };
  std::cout << emphasize(options.out) << '\n';
  line("architecture  ", options.architecture);
  line("weights       ",
       options.checkpoint.empty() ? "untrained, of seed " + options.seed : options.checkpoint);
  line("input image   ", shape_text({input.sizes().begin(), input.sizes().end()}));
  line("classes       ", grouped(classes) + (bundle.labels.empty() ? ", without labels" : ""));
  line("parameters    ", grouped(plan->parameters()));
  line("MACs          ", grouped(plan->macs()));
}

int run(const ImportCommandOptions& options) {
  if (options.list) {
    if (!options.architecture.empty() || !options.checkpoint.empty() || !options.seed.empty()) {
      throw_usage("--list stands alone");
    }
    return list_architectures(options.json);
  }
  check_options(options);
  const std::vector<std::string> labels =
      options.labels.empty() ? std::vector<std::string>() : load_labels(options.labels);
  Bundle bundle = options.checkpoint.empty() ? seeded_bundle(options, labels.size())
                                             : checkpoint_bundle(options);
  const Layer& last = *bundle.graph.find_layer(bundle.graph.outputs.front());
  const std::int64_t classes = bundle.weights.at(last.weights.at("weight")).shape()[0];
  if (!options.labels.empty() && static_cast<std::int64_t>(labels.size()) != classes) {
    throw_input(options.labels + ": " + std::to_string(labels.size()) + " labels for " +
                std::to_string(classes) + " classes");
  }
  bundle.labels = labels;
  save_bundle(bundle, options.out);
  report(bundle, options);
  return 0;
}

}  // namespace

Command add_import(CLI::App& app) {
  CLI::App* command =
      app.add_subcommand("import", "Make a bundle of a published architecture, without Python");
  auto options = std::make_shared<ImportCommandOptions>();
  command
      ->add_option("CHECKPOINT", options->checkpoint,
                   "Trained weights under torchvision's names, as .safetensors")
      ->type_name("FILE");
  command->add_option("--architecture", options->architecture, "Which one; --list shows them all")
      ->type_name("NAME");
  command->add_option("--seed", options->seed, "Untrained weights of this seed, no checkpoint")
      ->type_name("N");
  command->add_option("--out", options->out, "The bundle: a folder, or a .safetensors file")
      ->type_name("PATH");
  command->add_option("--labels", options->labels, "Class names, one a line")->type_name("FILE");
  command->add_option("--classes", options->classes, "Classes (default: the checkpoint's, or 1000)")
      ->type_name("N");
  command
      ->add_option("--size", options->size, "Usual image size (default: the checkpoint's, or 224)")
      ->type_name("HxW");
  command
      ->add_option("--ignore", options->ignore, "Tensors to leave out, names or patterns by commas")
      ->type_name("GLOB");
  command->add_flag("--list", options->list, "Show the architectures");
  command->add_flag("--json", options->json, "Print JSON");
  command->footer(
      "Example: leadsman import --architecture resnet18 --seed 1 --size 160 --out resnet18\n"
      "         leadsman import --architecture resnet50 resnet50.safetensors --out resnet50");
  return [options] { return run(*options); };
}

}  // namespace leadsman::cli
