// Functions of the user's that are called at a layer, with that layer's output.
#pragma once

#include <functional>
#include <string>

#include "leadsman/tensor.h"

namespace leadsman {

/// A layer's output while the run stands at it. Valid only inside the hook.
class HookedOutput {
 public:
  HookedOutput(const std::string& layer, TensorView view) : layer_(layer), view_(view) {}

  const std::string& layer() const { return layer_; }
  const Shape& shape() const { return view_.shape; }
  /// A copy in logical order.
  Tensor read() const { return to_tensor(view_); }
  /// The values where they lie, in memory order (tensor.h). Writing changes what follows.
  TensorView in_place() const { return view_; }
  /// What the layers after this one will see. Throws Error(kUsage) on another shape.
  void replace(const Tensor& value) const;

 private:
  const std::string& layer_;
  TensorView view_;
};

/// Called on the thread that called Runner::run. An exception ends the run and reaches its caller;
/// the runner can be used again.
using Hook = std::function<void(const HookedOutput&)>;

}  // namespace leadsman
