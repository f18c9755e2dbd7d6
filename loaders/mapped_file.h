// A file mapped into memory for reading.
#pragma once

#include <cstddef>
#include <memory>
#include <span>
#include <string>

namespace leadsman::loaders {

/// Read-only and shared: tensors borrow from it and keep it alive. A file that is replaced by
/// rename (as atomic_file.h does) stays readable here in its old form; one that another process
/// cuts short while it is mapped ends the process (SIGBUS), as with any mapping.
class MappedFile {
 public:
  /// Throws Error(kInput) naming the path when the file is missing, a folder, not regular (a pipe,
  /// a device) or not readable.
  static std::shared_ptr<const MappedFile> open(const std::string& path);
  ~MappedFile();
  MappedFile(const MappedFile&) = delete;
  MappedFile& operator=(const MappedFile&) = delete;

  const std::string& path() const { return path_; }
  std::span<const std::byte> bytes() const { return bytes_; }

 private:
  MappedFile(std::string path, std::span<const std::byte> bytes)
      : path_(std::move(path)), bytes_(bytes) {}

  std::string path_;
  std::span<const std::byte> bytes_;  ///< empty files are not mapped at all
};

/// Gives the whole pages of this part of a mapped file back to the system, which reads them again
/// when they are looked at.
void release_pages(const void* data, std::size_t bytes);

/// The whole of a small file. Throws as MappedFile::open, and when it is longer than `limit`.
std::string read_text_file(const std::string& path, std::size_t limit);

/// True when the path leads to something, following symbolic links; a link that leads nowhere is
/// an Error(kInput), and so is a path that cannot be looked at.
bool path_exists(const std::string& path);
/// True when the path leads to a folder.
bool is_folder(const std::string& path);

/// What the system says about `code` (an errno value).
std::string system_message(int code);

}  // namespace leadsman::loaders
