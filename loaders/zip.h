// The zip container, as far as NPZ files need it (PKWARE's APPNOTE.TXT 6.3.9): stored and deflated
// entries, zip64, CRC-32. No encryption, no archives in several parts.
#pragma once

#include <cstddef>
#include <cstdint>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "loaders/atomic_file.h"

namespace leadsman::loaders {

struct ZipEntry {
  std::string name;
  bool deflated = false;
  std::uint32_t crc = 0;
  std::uint64_t packed_bytes = 0;
  std::uint64_t bytes = 0;  ///< once unpacked
  std::uint64_t data_at = 0;
};

/// The entries in the order of their bytes, folders left out. On return every entry's packed bytes
/// lie inside the file, before the directory, and overlap with no other's; names are unique; a
/// deflated entry claims no more than deflate can expand to. Throws Error(kInput) otherwise.
std::vector<ZipEntry> read_zip_directory(std::span<const std::byte> file);

/// The first bytes of an entry, unpacked: to.size() of them, fewer when the entry is shorter.
/// Returns how many.
std::size_t peek_zip_entry(std::span<const std::byte> file, const ZipEntry& entry,
                           std::span<std::byte> to);
/// Unpacks a deflated entry into exactly entry.bytes bytes and checks its CRC.
void unpack_zip_entry(std::span<const std::byte> file, const ZipEntry& entry,
                      std::span<std::byte> to);
/// The bytes of a stored entry where they lie, their CRC checked.
std::span<const std::byte> stored_zip_entry(std::span<const std::byte> file, const ZipEntry& entry);

/// Writes a zip of stored entries; zip64 where sizes or offsets need it. No clock: every entry is
/// dated 1980-01-01.
class ZipWriter {
 public:
  /// Sizes and offsets from `zip64_from` on are written in 64 bits (tests need not write 4 GiB).
  explicit ZipWriter(AtomicFile& file, std::uint64_t zip64_from = 0xffffffff)
      : file_(file), zip64_from_(zip64_from) {}
  /// One entry whose bytes are `head` followed by `body`.
  void add(std::string_view name, std::string_view head, std::span<const std::byte> body);
  /// The directory; call once, last.
  void finish();

 private:
  AtomicFile& file_;
  std::uint64_t zip64_from_;
  std::string directory_;
  std::uint64_t count_ = 0;
};

}  // namespace leadsman::loaders
