#include "leadsman/error.h"
#include "leadsman/picture.h"
#include "loaders/atomic_file.h"
#include "loaders/stb.h"

namespace leadsman {

void write_png(const std::filesystem::path& path, const Picture& picture) {
  const std::string name = path.string();
  constexpr std::int64_t kMost = std::int64_t{1} << 30;
  if (picture.width <= 0 || picture.height <= 0 || picture.width > kMost / 3 / picture.height ||
      static_cast<std::int64_t>(picture.rgb.size()) != picture.width * picture.height * 3) {
    throw_usage(name + ": a picture of " + std::to_string(picture.width) + " x " +
                std::to_string(picture.height) + " pixels and " +
                std::to_string(picture.rgb.size()) + " bytes cannot be written");
  }
  std::vector<std::uint8_t> bytes;
  try {
    bytes = loaders::stb_encode_png(picture);
  } catch (const std::bad_alloc&) {
    throw Error(ErrorKind::kMemory, name + ": not enough memory to compress it");
  }
  loaders::AtomicFile file(name);
  file.write(bytes.data(), bytes.size());
  file.commit();
}

}  // namespace leadsman
