#include <iostream>

#include <nlohmann/json.hpp>

#include "commands.h"
#include "options.h"
#include "text.h"

namespace leadsman::cli {
namespace {

struct DescribeOptions {
  ModelOptions model;
  bool json = false;
  bool steps = false;
};

std::vector<std::int64_t> sizes_of(const Shape& shape) {
  return {shape.sizes().begin(), shape.sizes().end()};
}

void print_json(const Bundle& model, const Plan& plan) {
  using Json = nlohmann::ordered_json;
  Json document;
  document["name"] = model.graph.name;
  for (std::size_t i = 0; i < plan.input_names().size(); ++i) {
    document["inputs"][plan.input_names()[i]] = sizes_of(plan.input_shapes()[i]);
  }
  document["outputs"] = plan.output_names();
  document["labels"] = model.labels.size();
  document["threads"] = plan.threads();
  document["parameters"] = plan.parameters();
  document["macs"] = plan.macs();
  document["planned_peak_bytes"] = plan.peak_bytes();
  document["memory"] = {{"activations", plan.arena_bytes()},
                        {"workspace", plan.workspace_bytes()},
                        {"weights_in_place", plan.weight_bytes()},
                        {"weights_packed", plan.packed_bytes()}};
  document["layers"] = Json::array();
  for (const LayerSummary& layer : plan.layers()) {
    document["layers"].push_back({{"layer", layer.name},
                                  {"operator", layer.operator_name},
                                  {"shape", sizes_of(layer.shape)},
                                  {"parameters", layer.parameters},
                                  {"macs", layer.macs},
                                  {"activation_bytes", layer.activation_bytes},
                                  {"step", layer.step}});
  }
  document["steps"] = Json::array();
  for (const StepSummary& step : plan.steps()) {
    document["steps"].push_back({{"layers", step.layers},
                                 {"operator", step.operator_name},
                                 {"kernel", step.strategy},
                                 {"refused", step.refusals}});
  }
  std::cout << document.dump(2) << '\n';
}

void print_layers(const Plan& plan) {
  using Align = Table::Align;
  Table table({{"step", Align::kRight},
               {"layer", Align::kLeft, true},
               {"operator"},
               {"output", Align::kRight},
               {"parameters", Align::kRight},
               {"MACs", Align::kRight},
               {"activation", Align::kRight}});
  std::size_t last = static_cast<std::size_t>(-1);
  for (const LayerSummary& layer : plan.layers()) {
    // A layer that runs inside the step above shows no number of its own.
    const bool inside = layer.step == last;
    last = layer.step;
    table.add({inside ? "+" : std::to_string(layer.step + 1), layer.name, layer.operator_name,
               shape_text(sizes_of(layer.shape)), layer.parameters ? grouped(layer.parameters) : "",
               layer.macs ? scaled(static_cast<double>(layer.macs)) : "",
               bytes_text(static_cast<double>(layer.activation_bytes))});
  }
  table.print(std::cout);
}

void print_steps(const Plan& plan) {
  Table table({{"step", Table::Align::kRight}, {"kernel"}, {"layers it runs at once"}});
  for (std::size_t i = 0; i < plan.steps().size(); ++i) {
    const StepSummary& step = plan.steps()[i];
    std::string layers;
    for (const std::string& layer : step.layers) layers += (layers.empty() ? "" : " + ") + layer;
    table.add({std::to_string(i + 1), step.operator_name + "/" + step.strategy, layers});
    for (const std::string& refusal : step.refusals) table.add({"", "", "  not " + refusal});
  }
  table.print(std::cout);
}

void print_totals(const Bundle& model, const Plan& plan) {
  std::cout << '\n' << emphasize(model.graph.name) << '\n';
  const auto line = [](const std::string& name, const std::string& value) {
    std::cout << "  " << name << std::string(22 - name.size(), ' ') << value << '\n';
  };
  for (std::size_t i = 0; i < plan.input_names().size(); ++i) {
    line("input " + plan.input_names()[i].substr(0, 15),
         shape_text(sizes_of(plan.input_shapes()[i])));
  }
  if (!model.labels.empty()) line("labels", std::to_string(model.labels.size()));
  line("layers in steps",
       std::to_string(plan.layers().size()) + " in " + std::to_string(plan.steps().size()));
  line("parameters", grouped(plan.parameters()));
  line("MACs", grouped(plan.macs()));
  line("planned peak memory", bytes_text(static_cast<double>(plan.peak_bytes())));
  line("  activations", bytes_text(static_cast<double>(plan.arena_bytes())));
  line("  workspace", bytes_text(static_cast<double>(plan.workspace_bytes())) + " for " +
                          counted(plan.threads(), "thread"));
  line("  weights", bytes_text(static_cast<double>(plan.weight_bytes() + plan.packed_bytes())));
}

}  // namespace

Command add_describe(CLI::App& app) {
  CLI::App* command =
      app.add_subcommand("describe", "Show a model's layers, shapes, parameters, work and memory");
  auto options = std::make_shared<DescribeOptions>();
  options->model.add_to(*command);
  command->add_flag("--steps", options->steps,
                    "Show the plan instead: which layers run at once, and by which kernel");
  command->add_flag("--json", options->json, "One JSON object");
  command->footer("Example: leadsman describe examples/buttons/bundles/vit --size 96x96");
  return [options] {
    const Bundle model = load_bundle(options->model.bundle);
    const auto plan = Plan::make(model.graph, model.weights, options->model.plan_options(model));
    if (options->json) {
      print_json(model, *plan);
      return 0;
    }
    if (options->steps) {
      print_steps(*plan);
    } else {
      print_layers(*plan);
    }
    print_totals(model, *plan);
    return 0;
  };
}

}  // namespace leadsman::cli
