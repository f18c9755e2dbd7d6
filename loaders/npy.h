// .npy: one array.
#pragma once

#include <memory>
#include <string>

#include "leadsman/tensor_file.h"
#include "loaders/mapped_file.h"
#include "loaders/npy_header.h"
#include "loaders/tensor_source.h"

namespace leadsman::loaders {

/// Throws Error(kInput) without the path.
std::unique_ptr<const TensorSource> open_npy(std::shared_ptr<const MappedFile> file);
void write_npy(const std::string& path, const Tensor& tensor);

/// Throws Error(kInput) unless `held` bytes are what the header promises.
void require_npy_size(const NpyHeader& header, std::uint64_t held);

}  // namespace leadsman::loaders
