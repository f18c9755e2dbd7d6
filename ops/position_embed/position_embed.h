// Learned positions added to the tokens (Dosovitskiy et al. 2021): y[n, t] = x[n, t] + e[t].
//
// The weight holds `prefix` embeddings of tokens that have no place in the image (the class
// token), then those of a grid, row by row. When the second input's grid differs from the stored
// one, the embeddings are interpolated to it, once, when the layer is prepared.
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

const Operator& position_embed_operator();

/// Bicubic interpolation between grids whose corners coincide: output row i lies at
/// i * (from - 1) / (to - 1) of the input (0 when `to` is 1). Cubic convolution (Keys 1981) with
/// a = -0.75, the reference library's choice; beyond the edge the outermost values repeat. In
/// double. `grid` is [h, w, channels] in row-major order, and so is the [to_h, to_w, channels]
/// that comes back. Requires sizes of at least 1.
std::vector<float> interpolate_grid(const float* grid, std::int64_t h, std::int64_t w,
                                    std::int64_t channels, std::int64_t to_h, std::int64_t to_w);

}  // namespace leadsman::ops
