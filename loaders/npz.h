// .npz: a zip with one NPY array an entry, each called after its tensor with ".npy" behind.
#pragma once

#include <memory>
#include <string>

#include "leadsman/tensor_file.h"
#include "loaders/mapped_file.h"
#include "loaders/tensor_source.h"

namespace leadsman::loaders {

/// Entries of other names are passed over, unless there are no others. Throws Error(kInput) without
/// the path.
std::unique_ptr<const TensorSource> open_npz(std::shared_ptr<const MappedFile> file);
void write_npz(const std::string& path, const NamedTensors& tensors);

}  // namespace leadsman::loaders
