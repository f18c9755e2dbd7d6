// What our preprocessing makes of a picture against what another library made of it, stage by
// stage: decoded, resized, cropped, normalised.
//
// A reference may hold the stages behind its input (loaders/GRAPH_FORMAT.md,
// "reference.safetensors"). Each of ours is computed twice: from our own stage before it, and from
// the reference's. The second tells which stage made a difference that shows at the input.
#pragma once

#include <cstdint>
#include <string>
#include <vector>

#include "leadsman/compare.h"
#include "leadsman/picture.h"
#include "leadsman/preprocess.h"

namespace leadsman {

/// What decoders of JPEG may differ by. Inverse transforms that round in their own ways differ by
/// one level in Y, Cb and Cr, and blue is Y + 1.772 Cb (ITU-T T.871): 2.772 levels, 3 once rounded.
/// libjpeg-turbo's floating-point transform and its accurate integer one do come to 3.
inline constexpr int kJpegDecoderLevels = 3;

/// Levels are steps of an 8-bit picture; a normalised value is taken back to them by std / scale.
struct LevelDifference {
  double largest = 0.0;  ///< infinite when sizes differ or a value is not finite
  double share = 0.0;    ///< of the values that differ at all, 0..1
};

struct StageComparison {
  std::string stage;         ///< "decoded", "resized", "cropped" or "normalised"
  LevelDifference chained;   ///< ours, all the way from the file
  LevelDifference isolated;  ///< ours from the reference's stage before; of decoded as `chained`
  /// On isolated.largest: the decoder's levels for decoded, 0 for resized and cropped, what
  /// rounding in float explains for normalised.
  double allowed = 0.0;
  bool departs = false;  ///< isolated.largest > allowed
  std::string remark;    ///< "85x64 instead of 86x64", mostly empty
};

struct PictureComparison {
  std::vector<StageComparison> stages;  ///< the four, in order
  std::string first_departure;          ///< the first stage that departs; empty: none
  /// No stage departs, and the decoded pictures differ.
  bool only_decoder_differs = false;
  /// Our input and the reference's, both run through the model: what their difference becomes.
  double input_relative_l2 = 0.0;
  double output_relative_l2 =
      0.0;  ///< of the first output; infinite when the inputs' shapes differ
  /// Where the first output is largest: of the reference's input, and of ours.
  std::int64_t reference_top = 0;
  std::int64_t our_top = 0;
};

struct PictureCompareOptions {
  int decoder_levels = 0;  ///< that the decoded pictures may differ by
  PlanOptions plan;        ///< of the model's runs; the input shapes are the reference's
};

/// `decoded` is the picture that the reference was made from, read and turned as the preprocessing
/// says. Reads the tensors "preprocess:decoded", "preprocess:resized", "preprocess:cropped" (each
/// [1, 3, h, w] with levels 0..255) and the graph's inputs from the reference. Throws Error(kInput)
/// when one is missing or is no such picture, and whatever preprocessing and planning throw.
PictureComparison compare_picture(const Picture& decoded, const Preprocess& preprocess,
                                  const Graph& graph, const WeightMap& weights,
                                  const ReferenceSource& reference,
                                  const PictureCompareOptions& options = {});

}  // namespace leadsman
