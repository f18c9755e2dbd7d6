#include "leadsman/architectures.h"

#include <algorithm>

#include "leadsman/error.h"
#include "leadsman/names.h"
#include "leadsman/plan.h"
#include "loaders/architectures/families.h"
#include "loaders/text.h"

namespace leadsman {
namespace {

using loaders::Published;

constexpr std::int64_t kTrainedSide = 224;
// torchvision's ImageNet presets: per channel, of pictures in 0..1.
constexpr double kMean[] = {0.485, 0.456, 0.406};
constexpr double kStd[] = {0.229, 0.224, 0.225};

std::vector<const Published*> all_published() {
  std::vector<const Published*> all;
  for (const auto family :
       {loaders::resnet_family(), loaders::mobilenet_family(), loaders::efficientnet_family(),
        loaders::convnext_family(), loaders::vit_family()}) {
    for (const Published& each : family) all.push_back(&each);
  }
  return all;
}

const Published& find_published(std::string_view name) {
  for (const Published* each : all_published()) {
    if (each->name == name) return *each;
  }
  throw_usage("no architecture is called " + loaders::in_quotes(name) +
              loaders::nearest_hint(name, architecture_names()));
}

Preprocess published_preprocess(const Published& published) {
  Preprocess preprocess;
  preprocess.shorter_side = published.shorter_side;
  preprocess.interpolation = published.interpolation;
  preprocess.crop = PictureSize{kTrainedSide, kTrainedSide};
  preprocess.mean.assign(std::begin(kMean), std::end(kMean));
  preprocess.stddev.assign(std::begin(kStd), std::end(kStd));
  return preprocess;
}

/// Weights of zeros that share one block of memory: enough for planning, not for running.
WeightMap placeholder_weights(const Architecture& architecture) {
  std::int64_t most = 0;
  for (const auto& [name, weight] : architecture.weights) {
    most = std::max(most, weight.shape.elements());
  }
  const auto zeros = std::make_shared<const Tensor>(Shape{most});
  WeightMap weights;
  for (const auto& [name, weight] : architecture.weights) {
    weights.emplace(name, Tensor::borrow(weight.shape, zeros->data(), zeros));
  }
  return weights;
}

// The reference kernels read weights in place, so this plan costs no memory.
void count_work(Architecture& architecture) {
  const PlanOptions options{
      .input_shapes = {}, .threads = 1, .reference_kernels = true, .observe = {}};
  const auto plan = Plan::make(architecture.graph, placeholder_weights(architecture), options);
  architecture.parameters = plan->parameters();
  architecture.macs = plan->macs();
}

}  // namespace

Architecture loaders::write_architecture(std::string_view name,
                                         const ArchitectureOptions& options) {
  const Published& published = find_published(name);
  if (options.classes < 1 || options.classes > kMostClasses) {
    throw_usage(std::string(name) + ": the number of classes, " + std::to_string(options.classes) +
                ", is not between 1 and " + std::to_string(kMostClasses));
  }
  const Preprocess preprocess = published_preprocess(published);
  preprocess.at_size(options.size.height, options.size.width);  // throws for what is no size
  GraphWriter writer(std::string(name), options);
  const std::string output = published.write(writer);
  Architecture architecture = writer.finish(output);
  architecture.preprocess = preprocess;
  architecture.source = published.source;
  return architecture;
}

void loaders::set_size(Architecture& architecture, const PictureSize& size) {
  architecture.preprocess = architecture.preprocess.at_size(size.height, size.width);
  architecture.graph.inputs.front().usual_size = {size.height, size.width};
  try {
    count_work(architecture);
  } catch (const Error& error) {
    if (error.kind() != ErrorKind::kInput) throw;
    throw_usage(architecture.graph.name + " cannot take images of " + std::to_string(size.height) +
                "x" + std::to_string(size.width) + ": " + error.what());
  }
}

std::vector<std::string> architecture_names() {
  std::vector<std::string> names;
  for (const Published* each : all_published()) names.emplace_back(each->name);
  return names;
}

Architecture build_architecture(std::string_view name, const ArchitectureOptions& options) {
  Architecture architecture = loaders::write_architecture(name, options);
  loaders::set_size(architecture, options.size);
  return architecture;
}

}  // namespace leadsman
