#include "loaders/npz.h"

#include <array>
#include <utility>
#include <vector>

#include "leadsman/error.h"
#include "loaders/atomic_file.h"
#include "loaders/npy.h"
#include "loaders/npy_header.h"
#include "loaders/text.h"
#include "loaders/zip.h"

namespace leadsman::loaders {
namespace {

constexpr std::string_view kSuffix = ".npy";

class NpzSource : public TensorSource {
 public:
  explicit NpzSource(std::shared_ptr<const MappedFile> mapped) : TensorSource(std::move(mapped)) {
    std::vector<ZipEntry> entries = read_zip_directory(file()->bytes());
    for (ZipEntry& entry : entries) {
      if (!entry.name.ends_with(kSuffix)) continue;
      const std::string name = entry.name.substr(0, entry.name.size() - kSuffix.size());
      if (name.empty()) throw_input("an entry is called '.npy': a tensor without a name");
      try {
        NpyHeader header = read_header(entry);
        add(name, header.layout.info);
        arrays_.push_back({std::move(entry), std::move(header)});
      } catch (const Error& error) {
        throw_input("tensor " + in_quotes(name) + ": " + error.what());
      }
    }
    if (arrays_.empty() && !entries.empty()) {
      throw_input("is a zip without .npy entries: not an .npz file");
    }
  }

  Tensor read(std::size_t index) const override {
    const Array& array = arrays_[index];
    const std::span<const std::byte> bytes = file()->bytes();
    if (!array.entry.deflated) {
      const std::byte* const at = stored_zip_entry(bytes, array.entry).data();
      return make_tensor(array.header.layout, at + array.header.header_bytes, file(),
                         release_pages);
    }
    const auto unpacked =
        std::make_shared<std::vector<std::byte>>(static_cast<std::size_t>(array.entry.bytes));
    unpack_zip_entry(bytes, array.entry, *unpacked);
    return make_tensor(array.header.layout, unpacked->data() + array.header.header_bytes, unpacked);
  }

 private:
  struct Array {
    ZipEntry entry;
    NpyHeader header;
  };

  NpyHeader read_header(const ZipEntry& entry) const {
    const std::span<const std::byte> bytes = file()->bytes();
    std::array<std::byte, kNpyPrefixBytes> prefix{};
    const std::size_t held = peek_zip_entry(bytes, entry, prefix);
    std::vector<std::byte> header(npy_header_bytes(std::span(prefix).first(held)));
    if (peek_zip_entry(bytes, entry, header) < header.size() || entry.bytes < header.size()) {
      throw_input("the NPY header is cut short");
    }
    NpyHeader parsed = parse_npy_header(header);
    require_npy_size(parsed, entry.bytes);
    return parsed;
  }

  std::vector<Array> arrays_;
};

}  // namespace

std::unique_ptr<const TensorSource> open_npz(std::shared_ptr<const MappedFile> file) {
  return std::make_unique<NpzSource>(std::move(file));
}

void write_npz(const std::string& path, const NamedTensors& tensors) {
  for (const auto& [name, tensor] : tensors) {
    if (name.size() + kSuffix.size() > 0xffff) {
      throw_usage(path + ": a name of " + std::to_string(name.size()) +
                  " bytes is too long for an .npz file");
    }
    if (name.find('\0') != std::string::npos) {
      throw_usage(path + ": no zero byte can stand in a name: " + in_quotes(name));
    }
  }
  AtomicFile file(path);
  ZipWriter zip(file);
  for (const auto& [name, tensor] : tensors) {
    zip.add(name + std::string(kSuffix), format_npy_header(tensor.shape()),
            std::as_bytes(tensor.values()));
  }
  zip.finish();
  file.commit();
}

}  // namespace leadsman::loaders
