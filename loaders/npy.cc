#include "loaders/npy.h"

#include <utility>

#include "leadsman/error.h"
#include "loaders/atomic_file.h"

namespace leadsman::loaders {
namespace {

std::string stem_of(const std::string& path) {
  std::string name = path.substr(path.rfind('/') + 1);  // npos + 1 is 0
  const std::size_t dot = name.rfind('.');
  if (dot != std::string::npos && dot > 0) name.resize(dot);
  return name;
}

class NpySource : public TensorSource {
 public:
  explicit NpySource(std::shared_ptr<const MappedFile> mapped) : TensorSource(std::move(mapped)) {
    const std::span<const std::byte> bytes = file()->bytes();
    const std::size_t length = npy_header_bytes(bytes);
    if (length > bytes.size()) {
      throw_input("NPY header: takes " + std::to_string(length) + " bytes, the file holds " +
                  std::to_string(bytes.size()));
    }
    header_ = parse_npy_header(bytes.first(length));
    require_npy_size(header_, bytes.size());
    add(stem_of(file()->path()), header_.layout.info);
  }

  Tensor read(std::size_t /*index*/) const override {
    return make_tensor(header_.layout, file()->bytes().data() + header_.header_bytes, file(),
                       release_pages);
  }

 private:
  NpyHeader header_;
};

}  // namespace

void require_npy_size(const NpyHeader& header, std::uint64_t held) {
  const std::uint64_t data = held - header.header_bytes;
  if (std::cmp_equal(data, header.data_bytes)) return;
  throw_input("an array " + shape_text(header.layout.info.shape) + " of " +
              std::string(element_type_name(header.layout.info.type)) + " takes " +
              std::to_string(header.data_bytes) + " bytes, " + std::to_string(data) +
              " follow the header");
}

std::unique_ptr<const TensorSource> open_npy(std::shared_ptr<const MappedFile> file) {
  return std::make_unique<NpySource>(std::move(file));
}

void write_npy(const std::string& path, const Tensor& tensor) {
  AtomicFile file(path);
  file.write(format_npy_header(tensor.shape()));
  file.write(tensor.data(), static_cast<std::size_t>(tensor.elements()) * sizeof(float));
  file.commit();
}

}  // namespace leadsman::loaders
