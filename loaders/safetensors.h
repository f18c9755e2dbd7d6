// .safetensors: eight bytes with the header's length, the header (JSON), the tensors' bytes.
#pragma once

#include <memory>
#include <string>

#include "leadsman/tensor_file.h"
#include "loaders/mapped_file.h"
#include "loaders/tensor_source.h"

namespace leadsman::loaders {

/// Throws Error(kInput) without the path.
std::unique_ptr<const TensorSource> open_safetensors(std::shared_ptr<const MappedFile> file);
/// As write_tensors; names have been checked.
void write_safetensors(const std::string& path, const NamedTensors& tensors,
                       const Metadata& metadata);

}  // namespace leadsman::loaders
