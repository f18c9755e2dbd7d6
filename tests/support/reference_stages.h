// What a library with a given decoder would have stored of a picture.
#pragma once

#include <map>
#include <string>

#include "leadsman/preprocess.h"
#include "tests/support/random.h"

namespace leadsman::testing {

/// A picture as a reference stores it: levels, [1, 3, height, width].
inline Tensor levels_of(const Picture& picture) {
  Preprocess levels;
  levels.scale = 1.0;
  return normalise(picture, levels);
}

/// The stages behind the input called `input`, computed from `decoded`.
inline std::map<std::string, Tensor> stages_of(const Picture& decoded, const Preprocess& settings,
                                               const std::string& input) {
  const PreprocessStages stages = preprocess_stages(decoded, settings);
  return {{"preprocess:decoded", levels_of(decoded)},
          {"preprocess:resized", levels_of(stages.resized)},
          {"preprocess:cropped", levels_of(stages.cropped)},
          {input, stages.normalised}};
}

/// Another decoder's picture: a `share` of the values is `levels` up or down, within 0..255.
inline Picture decoded_otherwise(Picture picture, int levels, double share, Random& random) {
  for (std::uint8_t& value : picture.rgb) {
    if (random.uniform() >= share) continue;
    const int moved = value + (random.coin() ? levels : -levels);
    value = static_cast<std::uint8_t>(moved < 0 || moved > 255 ? 2 * value - moved : moved);
  }
  return picture;
}

}  // namespace leadsman::testing
