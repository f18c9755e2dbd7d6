// Published architectures, built in memory: no file and no Python needed.
//
// The graphs are layer for layer, and name for name, those that the exporter writes for
// torchvision's models of the same name (tests/conformance/test_import.py holds that), so a
// checkpoint with torchvision's tensor names fits:
//   - resnet18, 34, 50, 101, 152 (He et al. 2016, with the stride in the 3x3 convolution as Goyal
//     et al. 2017 have it), resnext* (Xie et al. 2017), wide_resnet* (Zagoruyko & Komodakis 2016)
//   - mobilenet_v2 (Sandler et al. 2018)
//   - efficientnet_b0 (Tan & Le 2019)
//   - convnext_tiny, small, base, large (Liu et al. 2022)
//   - vit_b_* and vit_l_* (Dosovitskiy et al. 2021), vit_ti_* and vit_s_* (Touvron et al. 2021;
//     not in torchvision, whose names of layers and tensors they use)
//
// All functions may be called from any thread.
#pragma once

#include <cstdint>
#include <map>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "leadsman/bundle.h"
#include "leadsman/graph.h"
#include "leadsman/preprocess.h"

namespace leadsman {

/// A tensor that an architecture needs, and what its seeded values look like: a bell around `mean`
/// with the standard deviation `spread`.
struct ArchitectureWeight {
  Shape shape;
  double mean = 0.0;
  double spread = 0.0;
};

struct Architecture {
  Graph graph;  ///< checked; one input "image" [N, 3, H, W], one output [N, classes]
  std::map<std::string, ArchitectureWeight, std::less<>> weights;  ///< by name of the checkpoint
  /// As for the first weights that torchvision published (vit_ti_*, vit_s_*: as DeiT's), at `size`.
  Preprocess preprocess;
  std::string source;           ///< "He et al. 2016"
  std::int64_t parameters = 0;  ///< trained values
  std::int64_t macs = 0;        ///< multiply-adds for one picture of `size`
};

struct ArchitectureOptions {
  std::int64_t classes = 1000;
  /// The graph's usual size. A vision transformer gets learned positions for a square of the
  /// longer side, and interpolates them to other sizes when it is planned.
  PictureSize size = {224, 224};
};

/// Every name that the functions below take, related ones together.
std::vector<std::string> architecture_names();

/// Throws Error(kUsage) for a name that is not known (with the nearest), fewer classes than 1, and
/// a size that the architecture cannot take.
Architecture build_architecture(std::string_view name, const ArchitectureOptions& options = {});

/// Untrained weights, for work that depends on an architecture's shape alone: how fast it is and
/// how much memory it takes, at any size. The values are a function of `seed` and of each tensor's
/// name, the same on every machine. They are scaled (after He et al. 2015) so that the output of
/// every layer has values of the order of 1 for a normalised picture, and no tensor is a neutral
/// one (gains of 1, means of 0). Throws Error(kMemory).
WeightMap seeded_weights(const Architecture& architecture, std::uint64_t seed);

struct ImportOptions {
  std::optional<std::int64_t> classes;  ///< default: as many as the checkpoint's last layer gives
  std::optional<PictureSize> size;      ///< default: 224 x 224, or what its positions were made for
  /// Names or patterns of tensors that the checkpoint holds beyond the architecture's.
  std::vector<std::string> ignore;
  int threads = 0;  ///< of the search for NaNs; 0: all the CPUs that the process may use
};

/// A bundle without labels from a checkpoint: a file that TensorFile opens, with torchvision's
/// tensor names, F32, F16, BF16 or F64. "module." before a name is taken off (a model trained in
/// parallel has it), as is the older naming of a vision transformer's MLP (torchvision 0.12).
/// num_batches_tracked is left out.
///
/// Throws Error(kUsage) for the errors of build_architecture and a pattern of `ignore` that matches
/// nothing; Error(kInput) naming the file when it cannot be read, when tensors are missing, of
/// another shape, not floating-point or not known (each with the nearest name; and with the
/// architecture that they do fit, when there is one), and when a value is not finite.
Bundle import_checkpoint(std::string_view name, const std::string& path,
                         const ImportOptions& options = {});

}  // namespace leadsman
