#include "leadsman/tensor_file.h"

#include <new>
#include <optional>
#include <set>

#include "leadsman/error.h"
#include "loaders/bytes.h"
#include "loaders/mapped_file.h"
#include "loaders/npy.h"
#include "loaders/npz.h"
#include "loaders/safetensors.h"
#include "loaders/tensor_source.h"
#include "loaders/text.h"

namespace leadsman {
namespace {

using loaders::MappedFile;
using loaders::TensorSource;

std::string extension_of(const std::string& path) {
  const std::size_t dot = path.rfind('.');
  const std::size_t slash = path.rfind('/');
  if (dot == std::string::npos || (slash != std::string::npos && dot < slash)) return "";
  return path.substr(dot);
}

bool begins_with(std::span<const std::byte> bytes, std::string_view magic) {
  return bytes.size() >= magic.size() && std::memcmp(bytes.data(), magic.data(), magic.size()) == 0;
}

std::unique_ptr<const TensorSource> open_source(std::shared_ptr<const MappedFile> file) {
  const std::span<const std::byte> bytes = file->bytes();
  const std::string extension = extension_of(file->path());
  if (bytes.empty()) throw_input("is empty");
  if (begins_with(bytes, "\x93NUMPY")) return loaders::open_npy(std::move(file));
  // Byte 8 tells a zip from a safetensors file whose header happens to be 67 MB long: the first
  // has a compression method there, the second an opening brace.
  const bool braced = bytes.size() > 8 && bytes[8] == std::byte{'{'};
  const bool zipped = begins_with(bytes, "PK\x03\x04") || begins_with(bytes, "PK\x05\x06");
  if (zipped && !braced) return loaders::open_npz(std::move(file));
  if (extension == ".npy") throw_input("does not begin as an NPY file does");
  if (extension == ".npz") throw_input("does not begin as an NPZ (zip) file does");
  if (extension == ".safetensors" || braced) return loaders::open_safetensors(std::move(file));
  throw_input("is none of the known tensor files (.safetensors, .npz, .npy)");
}

std::size_t index_of(const TensorSource& source, std::string_view name) {
  if (const std::optional<std::size_t> index = source.find(name)) return *index;
  throw_input(source.file()->path() + ": no tensor is called " + loaders::in_quotes(name) +
              loaders::nearest_hint(name, source.names()));
}

}  // namespace

TensorFile::TensorFile(std::shared_ptr<const TensorSource> source) : source_(std::move(source)) {}

TensorFile TensorFile::open(const std::string& path) {
  std::shared_ptr<const MappedFile> file = MappedFile::open(path);
  try {
    return TensorFile(open_source(std::move(file)));
  } catch (const Error& error) {
    throw Error(error.kind(), path + ": " + error.what());
  } catch (const std::bad_alloc&) {
    throw Error(ErrorKind::kMemory, path + ": not enough memory for its header");
  }
}

const std::string& TensorFile::path() const {
  return source_->file()->path();
}
const std::vector<std::string>& TensorFile::names() const {
  return source_->names();
}
const Metadata& TensorFile::metadata() const {
  return source_->metadata();
}

bool TensorFile::has(std::string_view name) const {
  return source_->find(name).has_value();
}

const TensorInfo& TensorFile::info(std::string_view name) const {
  return source_->info(index_of(*source_, name));
}

Tensor TensorFile::read(std::string_view name) const {
  const std::size_t index = index_of(*source_, name);
  const std::string place = path() + ": tensor " + loaders::in_quotes(name) + ": ";
  try {
    return source_->read(index);
  } catch (const Error& error) {
    throw Error(error.kind(), place + error.what());
  } catch (const std::bad_alloc&) {
    throw Error(ErrorKind::kMemory, place + "not enough memory");
  }
}

Tensor TensorFile::read_only() const {
  if (names().size() != 1) {
    throw_input(path() + ": holds " + std::to_string(names().size()) +
                " tensors where one is wanted");
  }
  return read(names().front());
}

void write_tensors(const std::string& path, const NamedTensors& tensors, const Metadata& metadata) {
  const std::string extension = extension_of(path);
  std::set<std::string_view> seen;
  for (const auto& [name, tensor] : tensors) {
    if (name.empty()) throw_usage(path + ": a tensor without a name cannot be written");
    if (loaders::find_invalid_utf8(name)) {
      throw_usage(path + ": the tensor name " + loaders::in_quotes(name) + " is not UTF-8");
    }
    if (!seen.insert(name).second) {
      throw_usage(path + ": two tensors are called " + loaders::in_quotes(name));
    }
  }
  if (extension == ".safetensors") return loaders::write_safetensors(path, tensors, metadata);
  if (extension != ".npz" && extension != ".npy") {
    throw_usage(path + ": tensors are written to .safetensors, .npz or .npy files, not to " +
                (extension.empty() ? "a file without extension" : loaders::in_quotes(extension)));
  }
  if (!metadata.empty()) throw_usage(path + ": an " + extension + " file cannot hold metadata");
  if (extension == ".npz") return loaders::write_npz(path, tensors);
  if (tensors.size() != 1) {
    throw_usage(path + ": an .npy file holds one tensor, not " + std::to_string(tensors.size()));
  }
  loaders::write_npy(path, tensors.front().second);
}

}  // namespace leadsman
