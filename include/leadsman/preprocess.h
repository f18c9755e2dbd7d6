// From a picture to the first input of a model: resize, centre crop, normalise.
//
// The steps and their roundings are those that most published classifiers were trained behind:
// Pillow's antialiased resize (tests hold equality with Pillow 9.4, bit for bit) and torchvision's
// Resize, CenterCrop, ToTensor and Normalize (0.14.1).
#pragma once

#include <cstdint>
#include <optional>
#include <vector>

#include "leadsman/picture.h"
#include "leadsman/tensor.h"

namespace leadsman {

enum class Interpolation {
  kNearest,   ///< the pixel under the centre, no antialiasing
  kBilinear,  ///< triangle filter, widened by the reduction
  kBicubic,   ///< cubic convolution, a = -0.5 (Keys 1981), widened by the reduction
};

enum class Channels {
  kRgb,
  kBgr,
  kGrey,  ///< one channel: (19595 R + 38470 G + 7471 B + 32768) >> 16, ITU-R 601-2 as in Pillow
};

/// How a picture becomes an input. Pure data; the defaults leave the size alone and give RGB in
/// 0..1. The section `preprocess` of graph.json (loaders/GRAPH_FORMAT.md) says the same.
struct Preprocess {
  /// > 0: the shorter side becomes this, the longer one int(shorter_side * longer / shorter).
  /// 0: no such resize.
  std::int64_t shorter_side = 0;
  /// Resize to exactly this, whatever the proportions. Excludes shorter_side.
  std::optional<PictureSize> exact;
  Interpolation interpolation = Interpolation::kBilinear;
  /// Centre crop after the resize. A picture that is smaller gets black borders.
  std::optional<PictureSize> crop;
  Channels channels = Channels::kRgb;
  /// For read_picture: preprocess() itself gets a picture that is turned already.
  Orientation orientation = Orientation::kAsStored;
  /// Each value becomes (byte * scale - mean) / stddev, in float. `mean` and `stddev` have one
  /// entry for each channel, in the order of `channels`; empty: 0 and 1.
  double scale = 1.0 / 255.0;
  std::vector<double> mean;
  std::vector<double> stddev;

  int channel_count() const { return channels == Channels::kGrey ? 1 : 3; }

  /// The same for a model fed height x width instead: what it gives is always of that size, and as
  /// far as can be it shows the same part of the picture.
  ///   - crop [ch, cw]: becomes [height, width]; shorter_side and exact are scaled with it, rounded
  ///     to the nearest, shorter_side by the larger of height/ch and width/cw (so that a square
  ///     picture that needed no border needs none now);
  ///   - exact without crop: exact becomes [height, width];
  ///   - shorter_side without crop: the shorter side becomes the larger of the two, and the centre
  ///     is cropped;
  ///   - neither: exact becomes [height, width].
  /// Throws Error(kUsage) unless 1 <= height, width <= 32768.
  Preprocess at_size(std::int64_t height, std::int64_t width) const;
};

/// Throws Error(kInput), saying which field, when the fields contradict each other: a size that is
/// not in 1..32768, both resizes at once, a scale, mean or stddev that is not finite or of another
/// count than the channels, a stddev of 0. All functions below do this first.
void check_preprocess(const Preprocess& preprocess);

/// Sizes of a picture after the resize, and after the crop as well.
PictureSize resized_size(const Preprocess& preprocess, const PictureSize& picture);
PictureSize output_size(const Preprocess& preprocess, const PictureSize& picture);

/// Logical [1, C, h, w]. Resizes only what the crop keeps. Throws Error(kInput) when the picture is
/// empty, or so extreme in its proportions that resizing needs more than 1 GiB.
Tensor preprocess(const Picture& picture, const Preprocess& preprocess);

/// What stands between the steps; leadsman/compare_picture.h compares it with another library's.
struct PreprocessStages {
  Picture resized;    ///< as it came when there is no resize
  Picture cropped;    ///< `resized` when there is no crop
  Tensor normalised;  ///< equals preprocess(), bit for bit
};
/// Resizes all of the picture, also what the crop then drops. Throws as preprocess().
PreprocessStages preprocess_stages(const Picture& picture, const Preprocess& preprocess);

/// The steps by themselves.
///
/// Pillow's resize of 8-bit pictures: columns first, then rows, with 22-bit fixed-point weights and
/// bytes in between. Sizes are at least 1.
Picture resize(const Picture& picture, const PictureSize& size, Interpolation interpolation);
/// torchvision's: the offset is (height - crop height) / 2, rounded half to even; what the picture
/// lacks is black.
Picture centre_crop(const Picture& picture, const PictureSize& size);
/// Channels, scale, mean and stddev.
Tensor normalise(const Picture& picture, const Preprocess& preprocess);

}  // namespace leadsman
