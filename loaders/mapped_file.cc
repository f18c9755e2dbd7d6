#include "loaders/mapped_file.h"

#include <cerrno>
#include <cstdint>
#include <limits>
#include <system_error>
#include <utility>

#include <fcntl.h>
#include <sys/mman.h>
#include <sys/stat.h>
#include <unistd.h>

#include "leadsman/error.h"
#include "loaders/text.h"

namespace leadsman::loaders {
namespace {

// Closes on every way out.
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

[[noreturn]] void throw_unreadable(const std::string& path, int code) {
  struct stat status {};
  if (code == ENOENT && ::lstat(path.c_str(), &status) == 0 && S_ISLNK(status.st_mode)) {
    char target[512];
    const ssize_t length = ::readlink(path.c_str(), target, sizeof(target));
    const std::string_view shown(target, length > 0 ? static_cast<std::size_t>(length) : 0);
    throw_input(path + ": is a symbolic link to " + in_quotes(shown) + ", which does not exist");
  }
  if (code == ENOENT) throw_input(path + ": no such file or folder");
  throw_input(path + ": cannot be opened: " + system_message(code));
}

}  // namespace

std::string system_message(int code) {
  return std::generic_category().message(code);
}

std::shared_ptr<const MappedFile> MappedFile::open(const std::string& path) {
  if (path.empty()) throw_input("an empty path where a file is wanted");
  // O_NONBLOCK: opening a pipe that nobody writes to must not wait.
  const Descriptor file(::open(path.c_str(), O_RDONLY | O_CLOEXEC | O_NONBLOCK));
  if (file.get() < 0) throw_unreadable(path, errno);
  struct stat status {};
  if (::fstat(file.get(), &status) != 0) throw_unreadable(path, errno);
  if (S_ISDIR(status.st_mode)) throw_input(path + ": is a folder, not a file");
  if (!S_ISREG(status.st_mode)) throw_input(path + ": is not a regular file");
  if (std::cmp_greater(status.st_size, std::numeric_limits<std::ptrdiff_t>::max())) {
    throw_input(path + ": is too big to be mapped");
  }
  const std::size_t size = static_cast<std::size_t>(status.st_size);
  std::span<const std::byte> bytes;
  if (size > 0) {
    void* const address = ::mmap(nullptr, size, PROT_READ, MAP_PRIVATE, file.get(), 0);
    if (address == MAP_FAILED) {
      const int code = errno;
      throw Error(code == ENOMEM ? ErrorKind::kMemory : ErrorKind::kInput,
                  path + ": cannot be mapped: " + system_message(code));
    }
    bytes = {static_cast<const std::byte*>(address), size};
  }
  return std::shared_ptr<const MappedFile>(new MappedFile(path, bytes));
}

MappedFile::~MappedFile() {
  if (!bytes_.empty()) {
    ::munmap(const_cast<std::byte*>(bytes_.data()), bytes_.size());
  }
}

void release_pages(const void* data, std::size_t bytes) {
  const auto page = static_cast<std::uintptr_t>(::sysconf(_SC_PAGESIZE));
  const auto address = reinterpret_cast<std::uintptr_t>(data);
  const std::uintptr_t begin = (address + page - 1) / page * page;
  const std::uintptr_t end = (address + bytes) / page * page;
  if (begin >= end) return;
  // The mapping is private and never written to: what goes is a copy of the file's page.
  ::madvise(const_cast<std::byte*>(static_cast<const std::byte*>(data)) + (begin - address),
            end - begin, MADV_DONTNEED);
}

std::string read_text_file(const std::string& path, std::size_t limit) {
  const std::shared_ptr<const MappedFile> file = MappedFile::open(path);
  const std::span<const std::byte> bytes = file->bytes();
  if (bytes.size() > limit) {
    throw_input(path + ": holds " + std::to_string(bytes.size()) + " bytes, at most " +
                std::to_string(limit) + " are read");
  }
  if (bytes.empty()) return "";
  return std::string(reinterpret_cast<const char*>(bytes.data()), bytes.size());
}

bool path_exists(const std::string& path) {
  struct stat status {};
  if (::stat(path.c_str(), &status) == 0) return true;
  const int code = errno;
  if (code == ENOENT && ::lstat(path.c_str(), &status) != 0) return false;
  throw_unreadable(path, code);
}

bool is_folder(const std::string& path) {
  struct stat status {};
  return ::stat(path.c_str(), &status) == 0 && S_ISDIR(status.st_mode);
}

}  // namespace leadsman::loaders
