// Writing a file so that its path holds either the old contents or the whole of the new ones.
#pragma once

#include <cstddef>
#include <cstdint>
#include <string>
#include <string_view>

namespace leadsman::loaders {

/// Bytes go to a temporary file in the same folder; commit() flushes it to the disk, renames it
/// over `path` and flushes the folder. Destroyed without commit(), it leaves nothing behind.
///
/// A symbolic link is followed: what it leads to is replaced. An existing file keeps its
/// permissions. Every failure is an Error(kInput) naming the path: a missing folder, no permission,
/// a full disk, a path that is a folder or a device.
class AtomicFile {
 public:
  explicit AtomicFile(const std::string& path);
  ~AtomicFile();
  AtomicFile(const AtomicFile&) = delete;
  AtomicFile& operator=(const AtomicFile&) = delete;

  void write(const void* data, std::size_t bytes);
  void write(std::string_view text) { write(text.data(), text.size()); }
  std::uint64_t written() const { return written_; }
  void commit();

 private:
  void flush();
  void write_through(const char* data, std::size_t bytes);
  [[noreturn]] void fail(const char* what, int code);

  std::string path_;       ///< as the caller says it, for messages
  std::string target_;     ///< with symbolic links followed
  std::string temporary_;  ///< empty once renamed
  std::string buffer_;
  std::uint64_t written_ = 0;
  int fd_ = -1;
};

void write_text_file(const std::string& path, std::string_view text);

/// A name that no other file has, for something that is not whole yet: ".leadsman-0f...partial".
std::string temporary_name();
/// Flushes a folder's entries to the disk, where the file system can.
void sync_folder(const std::string& folder);
/// "models" of "models/a.json", "." of "a.json", "/" of "/a.json".
std::string folder_of(const std::string& path);

}  // namespace leadsman::loaders
