// Two-dimensional convolution (cross-correlation, as LeCun et al. 1989 and every trained network
// since use the word):
//
//   y[n, o, i, j] = b[o] + sum over c, u, v of
//                   w[o, c, u, v] * x[n, g*Cg + c, i*s_h + u*d_h - p_top, j*s_w + v*d_w - p_left]
//
// where output channel o belongs to group g = o / (O / groups), Cg = C / groups, and x is zero
// outside the image. Weights come as [O, Cg, kh, kw].
#pragma once

#include "ops/operator.h"

namespace leadsman::ops {

/// The layer's numbers under short names; read once when a kernel is prepared.
struct Conv2dGeometry {
  std::int64_t n, c, h, w;  ///< input
  std::int64_t out_c, out_h, out_w;
  std::int64_t kernel_h, kernel_w;
  std::int64_t stride_h, stride_w;
  std::int64_t dilation_h, dilation_w;
  std::int64_t pad_top, pad_left, pad_bottom, pad_right;
  std::int64_t groups;

  /// Requires context.output.
  explicit Conv2dGeometry(const OpContext& context);
  std::int64_t group_in() const { return c / groups; }
  std::int64_t group_out() const { return out_c / groups; }
};

const Operator& conv2d_operator();

const Strategy& conv2d_winograd2();   ///< "winograd2": 3x3 by minimal filtering, tiles of 2x2
const Strategy& conv2d_winograd4();   ///< "winograd4": the same in tiles of 4x4
const Strategy& conv2d_depthwise3();  ///< "depthwise3": one filter a channel, 3x3, stride 1 or 2
const Strategy& conv2d_depthwise();   ///< "depthwise": one input channel a group
const Strategy& conv2d_implicit();    ///< "implicit": a matrix product, any shape
const Strategy& conv2d_reference();   ///< "reference": plain loops in double

}  // namespace leadsman::ops
