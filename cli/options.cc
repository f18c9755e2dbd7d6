#include "options.h"

#include <charconv>

#include "leadsman/error.h"
#include "leadsman/tensor_file.h"

namespace leadsman::cli {
namespace {

std::int64_t parse_side(std::string_view text, const std::string& whole) {
  std::int64_t side = 0;
  const auto [end, error] = std::from_chars(text.data(), text.data() + text.size(), side);
  if (error != std::errc{} || end != text.data() + text.size() || side < 1 || side > 65535) {
    throw_usage("--size: '" + whole + "' is not HxW with sides from 1 to 65535");
  }
  return side;
}

}  // namespace

std::pair<std::int64_t, std::int64_t> parse_size(const std::string& size) {
  if (size.empty()) return {0, 0};
  const std::size_t cross = size.find('x');
  if (cross == std::string::npos) {
    const std::int64_t side = parse_side(size, size);
    return {side, side};
  }
  const std::string_view view(size);
  return {parse_side(view.substr(0, cross), size), parse_side(view.substr(cross + 1), size)};
}

void ModelOptions::add_to(CLI::App& command, bool with_size) {
  command.add_option("BUNDLE", bundle, "Folder or .safetensors file of a model")->required();
  if (with_size) {
    command
        .add_option("--size", size, "Image size, HEIGHTxWIDTH or one side (default: the model's)")
        ->type_name("HxW");
  }
  command.add_option("--threads", threads, "Threads (default: the CPUs this process may use)")
      ->type_name("N");
  command
      .add_option("--accuracy", accuracy,
                  "fast (default): large convolutions in fewer multiplications, a little more\n"
                  "rounding; exact: every value one plain sum")
      ->check(CLI::IsMember({"exact", "fast"}))
      ->type_name("exact|fast");
  command.add_flag("--oracle", oracle, "Run the plain reference kernels, unfused (slow, exact)");
}

PlanOptions ModelOptions::plan_options(const Bundle& model) const {
  if (threads < 0 || threads > 1024) {
    throw_usage("--threads: " + std::to_string(threads) + " is not between 1 and 1024");
  }
  const auto [height, width] = parsed_size();
  PlanOptions plan;
  plan.input_shapes = input_shapes_at(model.graph, 1, height, width);
  plan.threads = threads;
  plan.accuracy = parsed_accuracy();
  plan.reference_kernels = oracle;
  return plan;
}

Preprocess preprocessing(const Bundle& model, const ModelOptions& options) {
  if (!model.preprocess) {
    throw_input(options.bundle +
                ": graph.json has no 'preprocess', so pictures cannot be read; use --tensor");
  }
  const auto [height, width] = options.parsed_size();
  return height == 0 ? *model.preprocess : model.preprocess->at_size(height, width);
}

Tensor read_input(const Bundle& model, const ModelOptions& options, const std::string& picture,
                  const std::string& tensor) {
  if (picture.empty() == tensor.empty()) throw_usage("give one picture or --tensor FILE.npy");
  if (!tensor.empty()) return TensorFile::open(tensor).read_only();
  const Preprocess settings = preprocessing(model, options);
  return preprocess(read_picture(picture, settings.orientation), settings);
}

std::vector<std::string> split_list(const std::string& text) {
  std::vector<std::string> parts;
  std::size_t begin = 0;
  while (begin <= text.size()) {
    const std::size_t end = std::min(text.find(',', begin), text.size());
    if (end > begin) parts.push_back(text.substr(begin, end - begin));
    begin = end + 1;
  }
  return parts;
}

}  // namespace leadsman::cli
