// How large a difference rounding alone can make at one layer.
//
// The model. A floating-point sum of K products errs like a random walk: its relative error grows
// as sqrt(K) * u, u = 2^-24 (probabilistic analysis: Higham & Mary 2019, SIAM J. Sci. Comput. 41),
// measured against the root of the sum of the squared products. Where the products cancel, the
// output is smaller than that root, and the error relative to the output is larger by their
// ratio, the layer's `gain`:
//
//   gain = sqrt(sum over outputs of sum_k (w_k x_k)^2) / ||y||, at least 1.
//
// The threshold on the relative L2 error of a layer whose inputs are exact is
//
//   u * (kSumConstant * sqrt(K) * growth * gain + kFunctionUlps)
//
// where growth is what the kernel's own way of summing adds (1 for plain sums; for Winograd's
// convolution ops/conv2d/winograd.h derives it from the matrices), with a second term for the
// rounding of the result and of functions such as exp. The constants cover both libraries' errors;
// what they leave as a margin is measured in tests/observe/threshold_test.cc. The gain is also by
// how much independent relative errors of the inputs grow on their way through the layer, which
// chained comparison needs.
#pragma once

#include <span>

#include "leadsman/plan.h"

namespace leadsman {

struct RoundingModel {
  double own = 0.0;   ///< relative L2 error that the layer itself may add
  double gain = 1.0;  ///< growth of the relative error of its inputs
};

/// `summary` is the layer's in the plan: of it, reduction and rounding_growth count. `inputs` and
/// `output` are the reference's.
RoundingModel rounding_model(const Layer& layer, const WeightMap& weights,
                             const LayerSummary& summary, std::span<const Tensor> inputs,
                             const Tensor& output, int threads);

}  // namespace leadsman
