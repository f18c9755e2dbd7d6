#include "loaders/atomic_file.h"

#include <algorithm>
#include <cerrno>
#include <cstdio>
#include <cstdlib>
#include <random>

#include <fcntl.h>
#include <sys/stat.h>
#include <unistd.h>

#include "leadsman/error.h"
#include "loaders/mapped_file.h"

namespace leadsman::loaders {
namespace {

constexpr std::size_t kBufferBytes = std::size_t{1} << 16;

// Where the bytes are to go: `path`, or what it leads to when it is a symbolic link. A link to a
// file that does not exist yet is replaced itself.
std::string follow(const std::string& path) {
  char* const resolved = ::realpath(path.c_str(), nullptr);
  if (resolved == nullptr) return path;
  std::string target(resolved);
  std::free(resolved);
  return target;
}

}  // namespace

std::string temporary_name() {
  std::random_device device;
  const std::uint64_t number = std::uint64_t{device()} << 32 | device();
  char name[64];
  std::snprintf(name, sizeof(name), ".leadsman-%016llx.partial",
                static_cast<unsigned long long>(number));
  return name;
}

std::string folder_of(const std::string& path) {
  const std::size_t slash = path.rfind('/');
  if (slash == std::string::npos) return ".";
  return slash == 0 ? "/" : path.substr(0, slash);
}

void sync_folder(const std::string& folder) {
  const int fd = ::open(folder.c_str(), O_RDONLY | O_DIRECTORY | O_CLOEXEC);
  if (fd < 0) return;  // a folder that may be written but not read
  ::fsync(fd);         // some file systems refuse this for folders: nothing more can be done
  ::close(fd);
}

AtomicFile::AtomicFile(const std::string& path) : path_(path) {
  buffer_.reserve(kBufferBytes);
  if (path.empty() || path.back() == '/') throw_input("'" + path + "': is not a name for a file");
  target_ = follow(path);
  struct stat status {};
  const bool exists = ::stat(target_.c_str(), &status) == 0;
  if (exists) {
    if (S_ISDIR(status.st_mode)) throw_input(path + ": is a folder, not a file");
    if (!S_ISREG(status.st_mode)) throw_input(path + ": is not a regular file");
    if (::faccessat(AT_FDCWD, target_.c_str(), W_OK, AT_EACCESS) != 0) {
      fail("cannot be replaced", errno);
    }
  }
  const std::string folder = folder_of(target_);
  for (int attempt = 0; fd_ < 0; ++attempt) {
    temporary_ = folder + "/" + temporary_name();
    fd_ = ::open(temporary_.c_str(), O_WRONLY | O_CREAT | O_EXCL | O_CLOEXEC, 0666);
    if (fd_ < 0 && (errno != EEXIST || attempt >= 16)) {
      const int code = errno;
      temporary_.clear();
      if (code == ENOENT) throw_input(path + ": cannot be written: the folder does not exist");
      fail("cannot be written", code);
    }
  }
  if (exists) ::fchmod(fd_, status.st_mode & 07777);
}

AtomicFile::~AtomicFile() {
  if (fd_ >= 0) ::close(fd_);
  if (!temporary_.empty()) ::unlink(temporary_.c_str());
}

void AtomicFile::fail(const char* what, int code) {
  throw_input(path_ + ": " + what + ": " + system_message(code));
}

void AtomicFile::write(const void* data, std::size_t bytes) {
  const char* const from = static_cast<const char*>(data);
  written_ += bytes;
  if (buffer_.size() + bytes > kBufferBytes) flush();
  if (bytes >= kBufferBytes) {
    write_through(from, bytes);
  } else if (bytes > 0) {
    buffer_.append(from, bytes);
  }
}

void AtomicFile::flush() {
  write_through(buffer_.data(), buffer_.size());
  buffer_.clear();
}

void AtomicFile::write_through(const char* data, std::size_t bytes) {
  constexpr std::size_t kMost = std::size_t{1} << 30;  // the system takes no more at once
  while (bytes > 0) {
    const ssize_t done = ::write(fd_, data, std::min(bytes, kMost));
    if (done < 0) {
      if (errno == EINTR) continue;
      fail("cannot be written", errno);
    }
    data += done;
    bytes -= static_cast<std::size_t>(done);
  }
}

void AtomicFile::commit() {
  flush();
  if (::fsync(fd_) != 0 && errno != EINVAL) fail("cannot be flushed to the disk", errno);
  const int fd = fd_;
  fd_ = -1;
  if (::close(fd) != 0) fail("cannot be closed", errno);
  if (::rename(temporary_.c_str(), target_.c_str()) != 0) fail("cannot be put in place", errno);
  temporary_.clear();
  sync_folder(folder_of(target_));
}

void write_text_file(const std::string& path, std::string_view text) {
  AtomicFile file(path);
  file.write(text);
  file.commit();
}

}  // namespace leadsman::loaders
