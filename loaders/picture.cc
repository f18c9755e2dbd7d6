#include "leadsman/picture.h"

#include <algorithm>
#include <array>
#include <cerrno>
#include <cstring>
#include <fstream>
#include <limits>
#include <new>
#include <utility>

#include <fcntl.h>
#include <sys/stat.h>
#include <unistd.h>

#include "leadsman/error.h"
#include "loaders/mapped_file.h"
#include "loaders/picture_formats.h"

namespace leadsman {
namespace {

using loaders::PictureSource;

constexpr std::string_view kJpegBegins = "\xff\xd8";
constexpr std::int64_t kLargestSide = std::int64_t{1} << 24;
constexpr std::int64_t kLargestBytes = std::numeric_limits<std::int32_t>::max();

class Descriptor {
 public:
  explicit Descriptor(int fd) : fd_(fd) {}
  ~Descriptor() {
    if (fd_ >= 0) ::close(fd_);
  }
  Descriptor(const Descriptor&) = delete;
  Descriptor& operator=(const Descriptor&) = delete;
  int get() const { return fd_; }

 private:
  int fd_;
};

// Not mapped: a camera may be writing the same file. A pipe is read to its end.
std::vector<std::byte> read_bytes(const std::string& path, std::int64_t limit) {
  const auto fail = [&](int code) {
    throw_input(
        path + ": " +
        (code == ENOENT ? "no such file" : "cannot be read: " + loaders::system_message(code)));
  };
  const auto fail_size = [&] {
    throw_input(path + ": is longer than the limit of " + std::to_string(limit) + " bytes");
  };
  if (path.empty()) throw_input("an empty path where a picture is wanted");
  const Descriptor file(::open(path.c_str(), O_RDONLY | O_CLOEXEC));
  if (file.get() < 0) fail(errno);
  struct stat status {};
  if (::fstat(file.get(), &status) != 0) fail(errno);
  if (S_ISDIR(status.st_mode)) throw_input(path + ": is a folder, not a picture");
  if (status.st_size > limit) fail_size();

  std::vector<std::byte> bytes;
  std::size_t filled = 0;
  // One more than its size, so that the end of the file shows without growing again.
  bytes.resize(S_ISREG(status.st_mode) ? static_cast<std::size_t>(status.st_size) + 1 : 65536);
  while (true) {
    const ssize_t got = ::read(file.get(), bytes.data() + filled, bytes.size() - filled);
    if (got < 0 && errno == EINTR) continue;
    if (got < 0) fail(errno);
    if (got == 0) break;
    filled += static_cast<std::size_t>(got);
    if (static_cast<std::int64_t>(filled) > limit) fail_size();
    if (filled == bytes.size()) bytes.resize(bytes.size() * 2);
  }
  bytes.resize(filled);
  return bytes;
}

loaders::DecodedPicture decode_any(const PictureSource& source) {
  if (source.bytes.empty()) source.fail("is empty");
  if (source.starts_with(kJpegBegins)) return loaders::decode_jpeg(source);
  if (source.starts_with("\x89PNG\r\n\x1a\n")) return loaders::decode_png(source);
  if (source.starts_with("BM")) return loaders::decode_bmp(source);
  if (source.size() >= 2 && source.at(0) == 'P' && source.at(1) >= '1' && source.at(1) <= '6') {
    return loaders::decode_pnm(source);
  }
  source.fail("is not JPEG, PNG, BMP or PNM");
}

}  // namespace

namespace loaders {

bool PictureSource::starts_with(std::string_view magic, std::size_t offset) const {
  return offset <= size() && magic.size() <= size() - offset &&
         std::memcmp(bytes.data() + offset, magic.data(), magic.size()) == 0;
}

void check_picture_size(const PictureSource& source, std::int64_t width, std::int64_t height) {
  const std::string shown = std::to_string(width) + " x " + std::to_string(height) + " pixels";
  if (width <= 0 || height <= 0) source.fail("has no pixels: " + shown);
  const std::int64_t side = std::min(source.limits.max_side, kLargestSide);
  if (width > side || height > side) {
    source.fail(shown + " are above the limit of " + std::to_string(side) + " a side");
  }
  const std::int64_t bytes = std::min(source.limits.max_bytes, kLargestBytes);
  if (width * height > bytes / 3) {
    source.fail(shown + " are above the limit of " + std::to_string(bytes) + " bytes decoded");
  }
}

Picture make_picture(const PictureSource& source, std::int64_t width, std::int64_t height) {
  check_picture_size(source, width, height);
  return {width, height, std::vector<std::uint8_t>(static_cast<std::size_t>(width * height * 3))};
}

}  // namespace loaders

Picture decode_picture(std::span<const std::byte> bytes, std::string_view name,
                       Orientation orientation, const PictureLimits& limits) {
  const PictureSource source{bytes, name, limits};
  if (std::cmp_greater(bytes.size(), limits.max_file_bytes)) {
    source.fail("is longer than the limit of " + std::to_string(limits.max_file_bytes) + " bytes");
  }
  try {
    loaders::DecodedPicture decoded = decode_any(source);
    if (orientation == Orientation::kAsStored) return std::move(decoded.picture);
    return loaders::turn_upright(std::move(decoded.picture),
                                 loaders::exif_orientation(decoded.exif));
  } catch (const std::bad_alloc&) {
    throw Error(ErrorKind::kMemory, std::string(name) + ": not enough memory to decode it");
  }
}

Picture read_picture(const std::filesystem::path& path, Orientation orientation,
                     const PictureLimits& limits) {
  const std::string name = path.string();
  std::vector<std::byte> bytes;
  try {
    bytes = read_bytes(name, limits.max_file_bytes);
  } catch (const std::bad_alloc&) {
    throw Error(ErrorKind::kMemory, name + ": not enough memory to read it");
  }
  return decode_picture(bytes, name, orientation, limits);
}

bool is_jpeg(const std::filesystem::path& path) {
  std::array<char, kJpegBegins.size()> begin{};
  std::ifstream file(path, std::ios::binary);
  file.read(begin.data(), begin.size());
  return file && std::string_view(begin.data(), begin.size()) == kJpegBegins;
}

}  // namespace leadsman
