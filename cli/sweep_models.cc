#include "sweep_models.h"

#include <algorithm>
#include <array>
#include <cstdio>
#include <filesystem>
#include <fstream>
#include <iostream>
#include <sstream>

#include <spawn.h>
#include <sys/wait.h>
#include <unistd.h>

#include "leadsman/architectures.h"
#include "leadsman/bundle.h"
#include "leadsman/error.h"
#include "leadsman/names.h"
#include "leadsman/runner.h"

namespace leadsman::cli {
namespace {

// VmHWM in bytes: the most physical memory this process ever held (proc(5)).
std::int64_t most_resident() {
  std::ifstream file("/proc/self/status");
  std::string line;
  while (std::getline(file, line)) {
    if (line.starts_with("VmHWM:")) return 1024 * std::strtoll(line.c_str() + 6, nullptr, 10);
  }
  throw_input("/proc/self/status: has no VmHWM");
}

// Runs a model of next to nothing, so that what the program itself takes (its code, its threads) is
// resident before a real one is loaded.
void touch_program(int threads) {
  SweepModel model;
  model.graph.inputs = {
      {"image", {GraphInput::kFree, 3, GraphInput::kFree, GraphInput::kFree}, {}}};
  Layer conv{"conv", "conv2d", {"image"}, {}, {{"weight", "w"}}};
  conv.attributes.set("kernel_size", std::vector<std::int64_t>{3, 3});
  model.graph.layers = {conv};
  model.graph.outputs = {"conv"};
  check_graph(model.graph);
  model.weights["w"] = filler({8, 3, 3, 3});
  PlanOptions options;
  options.input_shapes = input_shapes_at(model.graph, 1, 8, 8);
  options.threads = threads;
  Runner runner(Plan::make(model.graph, model.weights, options));
  runner.run(filler(options.input_shapes.front()));
}

std::string short_name(const std::string& argument) {
  std::filesystem::path path(argument);
  if (!path.has_filename()) path = path.parent_path();  // "bundles/vit/"
  return path.extension() == ".safetensors" ? path.stem() : path.filename();
}

// What the process wrote on its standard output; nothing unless it ended with 0.
std::optional<std::string> output_of(std::vector<std::string> arguments) {
  std::vector<char*> argv;
  for (std::string& argument : arguments) argv.push_back(argument.data());
  argv.push_back(nullptr);
  int ends[2];
  if (pipe(ends) != 0) return std::nullopt;
  posix_spawn_file_actions_t actions;
  posix_spawn_file_actions_init(&actions);
  posix_spawn_file_actions_adddup2(&actions, ends[1], STDOUT_FILENO);
  posix_spawn_file_actions_addclose(&actions, ends[0]);
  posix_spawn_file_actions_addclose(&actions, ends[1]);
  pid_t child = 0;
  const int failed = posix_spawn(&child, "/proc/self/exe", &actions, nullptr, argv.data(), environ);
  posix_spawn_file_actions_destroy(&actions);
  close(ends[1]);
  std::string text;
  std::array<char, 256> buffer{};
  for (ssize_t count = 0; (count = read(ends[0], buffer.data(), buffer.size())) > 0;) {
    text.append(buffer.data(), static_cast<std::size_t>(count));
  }
  close(ends[0]);
  int status = 0;
  if (failed != 0 || waitpid(child, &status, 0) != child) return std::nullopt;
  return WIFEXITED(status) && WEXITSTATUS(status) == 0 ? std::optional(text) : std::nullopt;
}

}  // namespace

SweepModel load_sweep_model(const std::string& argument) {
  const std::vector<std::string> names = architecture_names();
  if (!std::filesystem::exists(argument)) {
    if (std::ranges::find(names, argument) == names.end()) {
      const std::string nearest = nearest_name(argument, names);
      throw_input(argument + ": neither a bundle nor an architecture" +
                  (nearest.empty() ? "" : "; nearest: '" + nearest + "'"));
    }
    const Architecture built = build_architecture(argument);
    return {argument, built.graph, seeded_weights(built, 1)};
  }
  Bundle bundle = load_bundle(argument);
  return {short_name(argument), std::move(bundle.graph), std::move(bundle.weights)};
}

std::vector<SweepModel> load_sweep_models(const std::vector<std::string>& arguments) {
  std::vector<SweepModel> models;
  for (const std::string& argument : arguments) models.push_back(load_sweep_model(argument));
  std::vector<std::string> names;
  for (const SweepModel& model : models) names.push_back(model.name);
  for (std::size_t i = 0; i < models.size(); ++i) {
    if (std::ranges::count(names, names[i]) > 1) models[i].name = arguments[i];
    for (std::size_t j = 0; j < i; ++j) {
      if (models[j].name == models[i].name) throw_usage("'" + arguments[i] + "' is given twice");
    }
  }
  return models;
}

int print_resident(const std::string& argument, std::int64_t size, int threads, Accuracy accuracy) {
  touch_program(threads);
  const std::int64_t base = most_resident();
  const SweepModel model = load_sweep_model(argument);
  PlanOptions options;
  options.input_shapes = input_shapes_at(model.graph, 1, size, size);
  options.threads = threads;
  options.accuracy = accuracy;
  Runner runner(Plan::make(model.graph, model.weights, options));
  std::vector<Tensor> inputs;
  for (const Shape& shape : runner.plan().input_shapes()) inputs.push_back(filler(shape));
  runner.run(inputs);
  std::cout << base << ' ' << most_resident() << '\n';
  return 0;
}

std::optional<ResidentMemory> resident_of(const std::string& argument, std::int64_t size,
                                          int threads, Accuracy accuracy) {
  const auto text = output_of({"leadsman", "sweep", argument, "--resident", "--sizes",
                               std::to_string(size), "--threads", std::to_string(threads),
                               "--accuracy", accuracy == Accuracy::kExact ? "exact" : "fast"});
  ResidentMemory memory;
  if (!text || !(std::istringstream(*text) >> memory.base_bytes >> memory.peak_bytes)) {
    return std::nullopt;
  }
  return memory;
}

}  // namespace leadsman::cli
