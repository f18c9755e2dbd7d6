// The kernel of operators whose output is their input's bytes under another shape. The planner
// makes them views where it can; this is for where it cannot.
#pragma once

#include <cstring>

#include "ops/operator.h"

namespace leadsman::ops {

class CopyKernel final : public Kernel {
 public:
  bool runs_in_place() const override { return true; }
  void run(const KernelCall& call) const override {
    if (call.output.data == call.inputs[0].data) return;
    std::memcpy(call.output.data, call.inputs[0].data,
                static_cast<std::size_t>(call.output.shape.elements()) * sizeof(float));
  }
};

}  // namespace leadsman::ops
