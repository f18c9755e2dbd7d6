// What every comparison asks of a reference.
#pragma once

#include <string>
#include <utility>

#include "leadsman/compare.h"
#include "leadsman/error.h"

namespace leadsman {

/// Throws Error(kInput) when the reference has no such tensor.
inline Tensor need(const ReferenceSource& reference, const std::string& name) {
  std::optional<Tensor> tensor = reference(name);
  if (!tensor) throw_input("the reference holds no tensor '" + name + "'");
  return *std::move(tensor);
}

}  // namespace leadsman
