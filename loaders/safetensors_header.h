// The JSON header of a .safetensors file, checked in full before anything is believed.
#pragma once

#include <cstdint>
#include <string>
#include <string_view>
#include <vector>

#include "leadsman/tensor_file.h"

namespace leadsman::loaders {

struct SafetensorsEntry {
  std::string name;
  TensorInfo info;
  std::int64_t begin = 0;  ///< offsets from the end of the header
  std::int64_t end = 0;
};

struct SafetensorsHeader {
  std::vector<SafetensorsEntry> entries;  ///< in the order of their bytes
  Metadata metadata;
};

/// `data_bytes` is what the file holds after the header. On return every entry's bytes are exactly
/// what its type and shape need, and the entries cover the data without gap or overlap. Throws
/// Error(kInput) otherwise, as "tensor 'x': ..." where a tensor is to blame.
SafetensorsHeader parse_safetensors_header(std::string_view text, std::int64_t data_bytes);

}  // namespace leadsman::loaders
