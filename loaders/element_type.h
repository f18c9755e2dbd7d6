// Arrays as files hold them, turned into tensors.
#pragma once

#include <cstddef>
#include <cstdint>
#include <memory>
#include <optional>
#include <string>
#include <vector>

#include "leadsman/tensor.h"
#include "leadsman/tensor_file.h"

namespace leadsman::loaders {

/// How the elements of one array lie in its bytes.
struct ArrayLayout {
  TensorInfo info;
  bool big_endian = false;
  bool fortran_order = false;  ///< the first index runs fastest
};

/// The array's size in bytes; nullopt when it is 2^63 or more. Requires sizes that are not
/// negative.
std::optional<std::int64_t> array_bytes(const TensorInfo& info);

/// Requires array_bytes(layout.info) readable bytes at `data`, aligned or not. Little-endian F32 in
/// C order that is aligned is borrowed from `owner`; everything else is copied. Throws
/// Error(kInput) as TensorFile::read says, without the name of tensor or file.
Tensor make_tensor(const ArrayLayout& layout, const std::byte* data,
                   std::shared_ptr<const void> owner, Tensor::Release release = nullptr);

/// "[64, 3, 7, 7]"
std::string shape_text(const std::vector<std::int64_t>& shape);

}  // namespace leadsman::loaders
