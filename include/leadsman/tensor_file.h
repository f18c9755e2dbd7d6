// Files of named tensors: .safetensors, .npz and .npy, read and written.
//
// Sources of the formats: the safetensors repository's README ("Format"); NumPy's
// numpy/lib/format.py (NEP 1) for NPY 1.0, 2.0 and 3.0; PKWARE's APPNOTE.TXT for the zip container
// of NPZ.
#pragma once

#include <cstdint>
#include <map>
#include <memory>
#include <string>
#include <string_view>
#include <utility>
#include <vector>

#include "leadsman/tensor.h"

namespace leadsman {

/// What the elements of a stored tensor are. In memory every Tensor is float32.
enum class ElementType {
  kBool,
  kU8,
  kI8,
  kU16,
  kI16,
  kU32,
  kI32,
  kU64,
  kI64,
  kF16,
  kBF16,
  kF32,
  kF64,
};

/// "F32", "BF16", "I64", "BOOL"
std::string_view element_type_name(ElementType type);
std::int64_t element_bytes(ElementType type);
/// F16, BF16, F32 or F64.
bool is_floating(ElementType type);

/// A tensor as its file declares it. The sizes may be more than a Shape can hold (rank above
/// Shape::kMaxRank); reading such a tensor is an error, listing it is not.
struct TensorInfo {
  ElementType type = ElementType::kF32;
  std::vector<std::int64_t> shape;
};

using NamedTensors = std::vector<std::pair<std::string, Tensor>>;
using Metadata = std::map<std::string, std::string, std::less<>>;

namespace loaders {
class TensorSource;
}

/// An open file. Its header has been checked in full; tensors are converted when asked for, so one
/// that nobody reads costs nothing. Immutable, cheap to copy, safe to use from several threads.
class TensorFile {
 public:
  /// The format is recognised by the first bytes. Throws Error(kInput) naming the path and what is
  /// wrong in it.
  static TensorFile open(const std::string& path);

  const std::string& path() const;
  /// In the order in which the tensors lie in the file. The tensor of an .npy file has the file's
  /// name, without folder and extension.
  const std::vector<std::string>& names() const;
  bool has(std::string_view name) const;
  /// Throws Error(kInput), with the nearest name, when there is no such tensor.
  const TensorInfo& info(std::string_view name) const;

  /// The tensor as float32 in logical row-major order. F32 that lies in the file in that order and
  /// aligned is borrowed from the mapped file, not copied; everything else is converted (integers
  /// above 2^24 round). Throws Error(kInput) when the tensor's bytes are damaged, its rank is above
  /// Shape::kMaxRank, or a finite F64 is beyond float32; Error(kMemory) when there is no memory.
  Tensor read(std::string_view name) const;
  /// The one tensor of a file that holds exactly one; Error(kInput) otherwise.
  Tensor read_only() const;

  /// `__metadata__` of a .safetensors file; empty for the other formats.
  const Metadata& metadata() const;

 private:
  explicit TensorFile(std::shared_ptr<const loaders::TensorSource> source);
  std::shared_ptr<const loaders::TensorSource> source_;
};

/// Writes F32 tensors in the given order, in the format that the extension names: .safetensors,
/// .npz (uncompressed) or .npy (exactly one tensor). The file appears whole or not at all, and a
/// file that is mapped at that moment (by a TensorFile, say) stays readable in its old form. The
/// bytes depend on nothing but the arguments. Throws Error(kUsage) for another extension, for a
/// name that is empty, given twice or not UTF-8, and for metadata in a format that has none;
/// Error(kInput) when the path cannot be written.
void write_tensors(const std::string& path, const NamedTensors& tensors,
                   const Metadata& metadata = {});

}  // namespace leadsman
