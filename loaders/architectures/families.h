// Families of architectures, a file each, and what their tables hold.
#pragma once

#include <span>
#include <string_view>

#include "loaders/architectures/graph_writer.h"

namespace leadsman::loaders {

/// One architecture as it was published.
struct Published {
  std::string_view name;
  std::string_view source;
  /// Writes the layers and gives the name of the last.
  std::string (*write)(GraphWriter& writer);
  /// How its first weights were evaluated at 224 x 224.
  std::int64_t shorter_side = 256;
  Interpolation interpolation = Interpolation::kBilinear;
};

std::span<const Published> resnet_family();
std::span<const Published> mobilenet_family();
std::span<const Published> convnext_family();
std::span<const Published> efficientnet_family();
std::span<const Published> vit_family();

inline constexpr std::int64_t kMostClasses = 1'000'000;

/// build_architecture without the check that the graph can be planned, which sets `parameters` and
/// `macs`. Throws as build_architecture does for the name and the number of classes.
Architecture write_architecture(std::string_view name, const ArchitectureOptions& options);
/// Makes `size` the usual one and fits the preprocessing to it. Throws Error(kUsage) when the
/// architecture cannot take it.
void set_size(Architecture& architecture, const PictureSize& size);

}  // namespace leadsman::loaders
