#include "loaders/safetensors.h"

#include <cstdint>
#include <string_view>
#include <vector>

#include "leadsman/error.h"
#include "loaders/atomic_file.h"
#include "loaders/bytes.h"
#include "loaders/element_type.h"
#include "loaders/json_text.h"
#include "loaders/safetensors_header.h"
#include "loaders/text.h"

namespace leadsman::loaders {
namespace {

constexpr std::size_t kLengthBytes = 8;
// The limit of the format's own reader (its SafeTensors::read_metadata; from memory).
constexpr std::uint64_t kMaxHeaderBytes = 100'000'000;

class SafetensorsSource : public TensorSource {
 public:
  explicit SafetensorsSource(std::shared_ptr<const MappedFile> mapped)
      : TensorSource(std::move(mapped)) {
    const std::span<const std::byte> bytes = file()->bytes();
    if (bytes.size() < kLengthBytes) {
      throw_input("holds " + std::to_string(bytes.size()) +
                  " bytes, too few for a .safetensors file");
    }
    const std::uint64_t length = load_le<std::uint64_t>(bytes.data());
    const std::uint64_t rest = bytes.size() - kLengthBytes;
    if (length > rest) {
      throw_input("the header is said to take " + std::to_string(length) +
                  " bytes, the file holds " + std::to_string(rest) + " after the first eight");
    }
    if (length > kMaxHeaderBytes) {
      throw_input("the header takes " + std::to_string(length) + " bytes, at most " +
                  std::to_string(kMaxHeaderBytes) + " are read");
    }
    const std::string_view text(reinterpret_cast<const char*>(bytes.data()) + kLengthBytes,
                                static_cast<std::size_t>(length));
    if (text.empty() || text.front() != '{') throw_input("the header does not begin with '{'");
    SafetensorsHeader header =
        parse_safetensors_header(text, static_cast<std::int64_t>(rest - length));
    data_ = bytes.data() + kLengthBytes + length;
    metadata_ = std::move(header.metadata);
    begins_.reserve(header.entries.size());
    for (SafetensorsEntry& entry : header.entries) {
      add(entry.name, std::move(entry.info));
      begins_.push_back(entry.begin);
    }
  }

  Tensor read(std::size_t index) const override {
    return make_tensor({info(index), false, false}, data_ + begins_[index], file(), release_pages);
  }

 private:
  const std::byte* data_ = nullptr;
  std::vector<std::int64_t> begins_;
};

}  // namespace

std::unique_ptr<const TensorSource> open_safetensors(std::shared_ptr<const MappedFile> file) {
  return std::make_unique<SafetensorsSource>(std::move(file));
}

void write_safetensors(const std::string& path, const NamedTensors& tensors,
                       const Metadata& metadata) {
  std::string header = "{";
  if (!metadata.empty()) {
    header += "\"__metadata__\":{";
    for (const auto& [key, value] : metadata) {
      if (find_invalid_utf8(key) || find_invalid_utf8(value)) {
        throw_usage(path + ": the metadata under " + in_quotes(key) + " is not UTF-8");
      }
      if (header.back() != '{') header += ',';
      header += json_quoted(key) + ':' + json_quoted(value);
    }
    header += '}';
  }
  std::int64_t offset = 0;
  for (const auto& [name, tensor] : tensors) {
    if (name == "__metadata__") throw_usage(path + ": no tensor can be called '__metadata__'");
    const std::int64_t end = offset + tensor.elements() * std::int64_t{sizeof(float)};
    if (header.size() > 1) header += ',';
    header += json_quoted(name) + ":{\"dtype\":\"F32\",\"shape\":[";
    for (const std::int64_t size : tensor.shape().sizes()) {
      if (header.back() != '[') header += ',';
      header += std::to_string(size);
    }
    header += "],\"data_offsets\":[" + std::to_string(offset) + ',' + std::to_string(end) + "]}";
    offset = end;
  }
  header += '}';
  // Padded with spaces so that the data begin at a multiple of 64, a line of the cache.
  constexpr std::size_t kAlignment = 64;
  header.append((kAlignment - (kLengthBytes + header.size()) % kAlignment) % kAlignment, ' ');
  if (header.size() > kMaxHeaderBytes) {
    throw_usage(path + ": names, shapes and metadata take " + std::to_string(header.size()) +
                " bytes, more than readers of the format accept");
  }
  AtomicFile file(path);
  std::string length;
  append_le(length, static_cast<std::uint64_t>(header.size()));
  file.write(length);
  file.write(header);
  for (const auto& [name, tensor] : tensors) {
    file.write(tensor.data(), static_cast<std::size_t>(tensor.elements()) * sizeof(float));
  }
  file.commit();
}

}  // namespace leadsman::loaders
