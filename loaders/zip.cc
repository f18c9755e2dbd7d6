#include "loaders/zip.h"

#include <algorithm>
#include <optional>
#include <set>

#include "leadsman/error.h"
#include "loaders/bytes.h"
#include "loaders/crc32.h"
#include "loaders/inflate.h"
#include "loaders/text.h"

namespace leadsman::loaders {
namespace {

using Bytes = std::span<const std::byte>;

constexpr std::uint32_t kLocalMark = 0x04034b50;
constexpr std::uint32_t kEntryMark = 0x02014b50;
constexpr std::uint32_t kEndMark = 0x06054b50;
constexpr std::uint32_t kEnd64Mark = 0x06064b50;
constexpr std::uint32_t kLocator64Mark = 0x07064b50;
constexpr std::size_t kLocalBytes = 30;
constexpr std::size_t kEntryBytes = 46;
constexpr std::size_t kEndBytes = 22;
constexpr std::size_t kEnd64Bytes = 56;
constexpr std::size_t kLocator64Bytes = 20;
constexpr std::uint16_t kExtra64 = 0x0001;
constexpr std::uint16_t kStored = 0;
constexpr std::uint16_t kDeflated = 8;
constexpr std::uint16_t kUtf8Names = 1u << 11;
constexpr std::uint16_t kDate = 1 << 5 | 1;  // 1980-01-01
constexpr std::uint16_t kMax16 = 0xffff;
constexpr std::uint32_t kMax32 = 0xffffffff;
// Bytes that one byte of deflate can stand for: 258 in two bits (RFC 1951).
constexpr std::uint64_t kMaxExpansion = 1032;

template <typename T>
T number(Bytes bytes, std::size_t at) {
  return load_le<T>(bytes.data() + at);
}

struct Directory {
  std::uint64_t count = 0;
  std::uint64_t bytes = 0;
  std::uint64_t at = 0;
  std::uint64_t end = 0;  ///< where the records after it begin
};

Directory find_directory(Bytes file) {
  if (file.size() < kEndBytes) throw_input("zip: holds too few bytes for its end record");
  // The end record is the last thing but for a comment, whose length it states.
  std::optional<std::size_t> found;
  const std::size_t furthest = std::min<std::size_t>(file.size() - kEndBytes, kMax16);
  for (std::size_t comment = 0; comment <= furthest && !found; ++comment) {
    const std::size_t at = file.size() - kEndBytes - comment;
    if (number<std::uint32_t>(file, at) == kEndMark &&
        number<std::uint16_t>(file, at + 20) == comment) {
      found = at;
    }
  }
  if (!found) throw_input("zip: no end record; the file may have been cut short");
  const std::size_t at = *found;
  Directory directory;
  directory.count = number<std::uint16_t>(file, at + 10);
  directory.bytes = number<std::uint32_t>(file, at + 12);
  directory.at = number<std::uint32_t>(file, at + 16);
  directory.end = at;
  std::uint64_t disks =
      std::uint64_t{number<std::uint16_t>(file, at + 4)} + number<std::uint16_t>(file, at + 6);
  std::uint64_t count_here = number<std::uint16_t>(file, at + 8);
  if (at >= kLocator64Bytes &&
      number<std::uint32_t>(file, at - kLocator64Bytes) == kLocator64Mark) {
    const std::uint64_t end64 = number<std::uint64_t>(file, at - kLocator64Bytes + 8);
    if (at - kLocator64Bytes < kEnd64Bytes || end64 > at - kLocator64Bytes - kEnd64Bytes ||
        number<std::uint32_t>(file, static_cast<std::size_t>(end64)) != kEnd64Mark) {
      throw_input("zip: the zip64 end record is not where its locator says");
    }
    const std::size_t at64 = static_cast<std::size_t>(end64);
    disks = std::uint64_t{number<std::uint32_t>(file, at64 + 16)} +
            number<std::uint32_t>(file, at64 + 20);
    count_here = number<std::uint64_t>(file, at64 + 24);
    directory.count = number<std::uint64_t>(file, at64 + 32);
    directory.bytes = number<std::uint64_t>(file, at64 + 40);
    directory.at = number<std::uint64_t>(file, at64 + 48);
    directory.end = end64;
  }
  if (disks != 0 || count_here != directory.count) {
    throw_input("zip: archives in several parts are not read");
  }
  if (directory.at > directory.end || directory.bytes != directory.end - directory.at) {
    throw_input("zip: the directory is said to take " + std::to_string(directory.bytes) +
                " bytes from " + std::to_string(directory.at) + ", its end record begins at " +
                std::to_string(directory.end));
  }
  return directory;
}

// Sizes and offset that did not fit in 32 bits stand in an extra field, in this order.
void read_extra64(Bytes extra, ZipEntry& entry, std::uint64_t& local_at) {
  const bool wanted = entry.bytes == kMax32 || entry.packed_bytes == kMax32 || local_at == kMax32;
  while (wanted && extra.size() >= 4) {
    const std::uint16_t id = number<std::uint16_t>(extra, 0);
    const std::size_t length = number<std::uint16_t>(extra, 2);
    if (length > extra.size() - 4) break;
    Bytes field = extra.subspan(4, length);
    extra = extra.subspan(4 + length);
    if (id != kExtra64) continue;
    for (std::uint64_t* value : {&entry.bytes, &entry.packed_bytes, &local_at}) {
      if (*value != kMax32) continue;
      if (field.size() < 8) throw_input("zip: the zip64 sizes of an entry are cut short");
      *value = number<std::uint64_t>(field, 0);
      field = field.subspan(8);
    }
    return;
  }
}

// The entry whose directory record lies at `at`, which moves behind it. `data_at` is that of the
// local record until locate_data() has run.
ZipEntry read_entry(Bytes file, const Directory& directory, std::uint64_t& at) {
  if (directory.end - at < kEntryBytes ||
      number<std::uint32_t>(file, static_cast<std::size_t>(at)) != kEntryMark) {
    throw_input("zip: the directory is damaged at byte " + std::to_string(at));
  }
  const Bytes record = file.subspan(static_cast<std::size_t>(at));
  const std::size_t name_bytes = number<std::uint16_t>(record, 28);
  const std::size_t extra_bytes = number<std::uint16_t>(record, 30);
  const std::size_t comment_bytes = number<std::uint16_t>(record, 32);
  const std::size_t bytes = kEntryBytes + name_bytes + extra_bytes + comment_bytes;
  if (bytes > directory.end - at) {
    throw_input("zip: the directory is damaged at byte " + std::to_string(at));
  }
  ZipEntry entry;
  entry.name.assign(reinterpret_cast<const char*>(record.data()) + kEntryBytes, name_bytes);
  const std::string place = "zip: entry " + in_quotes(entry.name) + ": ";
  const std::uint16_t flags = number<std::uint16_t>(record, 8);
  const std::uint16_t method = number<std::uint16_t>(record, 10);
  entry.crc = number<std::uint32_t>(record, 16);
  entry.packed_bytes = number<std::uint32_t>(record, 20);
  entry.bytes = number<std::uint32_t>(record, 24);
  entry.data_at = number<std::uint32_t>(record, 42);
  read_extra64(record.subspan(kEntryBytes + name_bytes, extra_bytes), entry, entry.data_at);
  if ((flags & 1u) != 0) throw_input(place + "is encrypted");
  if (method != kStored && method != kDeflated) {
    throw_input(place + "compression method " + std::to_string(method) +
                " is not known (stored and deflated entries are read)");
  }
  if (entry.name.empty() || find_invalid_utf8(entry.name)) {
    throw_input(place + "the name is empty or not UTF-8");
  }
  entry.deflated = method == kDeflated;
  if (!entry.deflated && entry.bytes != entry.packed_bytes) {
    throw_input(place + "is stored, yet takes " + std::to_string(entry.packed_bytes) +
                " bytes for " + std::to_string(entry.bytes));
  }
  if (entry.deflated && entry.bytes / kMaxExpansion > entry.packed_bytes) {
    throw_input(place + std::to_string(entry.packed_bytes) + " bytes cannot unpack to " +
                std::to_string(entry.bytes));
  }
  at += bytes;
  return entry;
}

// Turns the local record's place into that of the data behind it.
void locate_data(Bytes file, const Directory& directory, ZipEntry& entry) {
  const std::string place = "zip: entry " + in_quotes(entry.name) + ": ";
  if (directory.at < kLocalBytes || entry.data_at > directory.at - kLocalBytes ||
      number<std::uint32_t>(file, static_cast<std::size_t>(entry.data_at)) != kLocalMark) {
    throw_input(place + "no local record at byte " + std::to_string(entry.data_at));
  }
  const Bytes record = file.subspan(static_cast<std::size_t>(entry.data_at));
  const std::size_t name_bytes = number<std::uint16_t>(record, 26);
  const std::uint64_t bytes =
      kLocalBytes + name_bytes + std::uint64_t{number<std::uint16_t>(record, 28)};
  const std::uint64_t room = directory.at - entry.data_at;
  if (bytes > room || entry.packed_bytes > room - bytes) {
    throw_input(place + "its " + std::to_string(entry.packed_bytes) +
                " bytes run into the directory");
  }
  const std::string_view name(reinterpret_cast<const char*>(record.data()) + kLocalBytes,
                              name_bytes);
  if (name != entry.name) throw_input(place + "its local record calls it " + in_quotes(name));
  entry.data_at += bytes;
}

void require_crc(const ZipEntry& entry, Bytes bytes) {
  if (crc32(bytes) != entry.crc) {
    throw_input("the checksum (CRC-32) is wrong: the bytes are damaged");
  }
}

Bytes packed(Bytes file, const ZipEntry& entry) {
  return file.subspan(static_cast<std::size_t>(entry.data_at),
                      static_cast<std::size_t>(entry.packed_bytes));
}

}  // namespace

std::vector<ZipEntry> read_zip_directory(Bytes file) {
  const Directory directory = find_directory(file);
  std::vector<ZipEntry> entries;
  std::set<std::string> names;
  struct Extent {
    std::uint64_t begin, end;
    std::size_t entry;
  };
  std::vector<Extent> extents;
  std::uint64_t at = directory.at;
  for (std::uint64_t i = 0; i < directory.count; ++i) {
    ZipEntry entry = read_entry(file, directory, at);
    if (!names.insert(entry.name).second) {
      throw_input("zip: two entries are called " + in_quotes(entry.name));
    }
    const std::uint64_t begin = entry.data_at;
    locate_data(file, directory, entry);
    extents.push_back({begin, entry.data_at + entry.packed_bytes, entries.size()});
    entries.push_back(std::move(entry));
  }
  if (at != directory.end) throw_input("zip: the directory holds more than its entries");
  std::sort(extents.begin(), extents.end(),
            [](const Extent& a, const Extent& b) { return a.begin < b.begin; });
  std::vector<ZipEntry> sorted;
  std::uint64_t covered = 0;
  for (const Extent& extent : extents) {
    ZipEntry& entry = entries[extent.entry];
    if (extent.begin < covered) {
      throw_input("zip: entry " + in_quotes(entry.name) + ": overlaps with another entry");
    }
    covered = extent.end;
    if (entry.name.back() != '/') sorted.push_back(std::move(entry));
  }
  return sorted;
}

std::size_t peek_zip_entry(Bytes file, const ZipEntry& entry, std::span<std::byte> to) {
  const Bytes from = packed(file, entry);
  if (entry.deflated) return inflate_start(from, to);
  const std::size_t count = std::min(from.size(), to.size());
  std::copy_n(from.begin(), count, to.begin());
  return count;
}

void unpack_zip_entry(Bytes file, const ZipEntry& entry, std::span<std::byte> to) {
  inflate(packed(file, entry), to);
  require_crc(entry, to);
}

Bytes stored_zip_entry(Bytes file, const ZipEntry& entry) {
  const Bytes bytes = packed(file, entry);
  require_crc(entry, bytes);
  return bytes;
}

void ZipWriter::add(std::string_view name, std::string_view head, Bytes body) {
  const std::uint64_t at = file_.written();
  const std::uint64_t bytes = head.size() + std::uint64_t{body.size()};
  const std::uint32_t crc = crc32(body, crc32(std::as_bytes(std::span(head))));
  const bool big = bytes >= zip64_from_;
  const bool far = at >= zip64_from_;
  const std::uint16_t version = big || far ? 45 : 20;
  const std::uint32_t shown = big ? kMax32 : static_cast<std::uint32_t>(bytes);
  const auto common = [&](std::string& to) {
    append_le(to, version);
    append_le(to, kUtf8Names);
    append_le(to, kStored);
    append_le(to, std::uint16_t{0});  // time
    append_le(to, kDate);
    append_le(to, crc);
    append_le(to, shown);
    append_le(to, shown);
    append_le(to, static_cast<std::uint16_t>(name.size()));
  };
  std::string local;
  append_le(local, kLocalMark);
  common(local);
  append_le(local, static_cast<std::uint16_t>(big ? 20 : 0));
  local += name;
  std::string extra;
  if (big) {
    append_le(extra, bytes);
    append_le(extra, bytes);
    append_le(local, kExtra64);
    append_le(local, std::uint16_t{16});
    local += extra;
  }
  if (far) append_le(extra, at);
  append_le(directory_, kEntryMark);
  append_le(directory_, version);
  common(directory_);
  append_le(directory_, static_cast<std::uint16_t>(extra.empty() ? 0 : extra.size() + 4));
  append_le(directory_, std::uint16_t{0});  // comment
  append_le(directory_, std::uint16_t{0});  // disk
  append_le(directory_, std::uint16_t{0});  // internal attributes
  append_le(directory_, std::uint32_t{0});  // external attributes
  append_le(directory_, far ? kMax32 : static_cast<std::uint32_t>(at));
  directory_ += name;
  if (!extra.empty()) {
    append_le(directory_, kExtra64);
    append_le(directory_, static_cast<std::uint16_t>(extra.size()));
    directory_ += extra;
  }
  file_.write(local);
  file_.write(head);
  file_.write(body.data(), body.size());
  ++count_;
}

void ZipWriter::finish() {
  const std::uint64_t at = file_.written();
  const std::uint64_t bytes = directory_.size();
  file_.write(directory_);
  std::string end;
  if (count_ >= kMax16 || bytes >= zip64_from_ || at >= zip64_from_) {
    append_le(end, kEnd64Mark);
    append_le(end, std::uint64_t{kEnd64Bytes - 12});
    append_le(end, std::uint16_t{45});
    append_le(end, std::uint16_t{45});
    append_le(end, std::uint32_t{0});
    append_le(end, std::uint32_t{0});
    append_le(end, count_);
    append_le(end, count_);
    append_le(end, bytes);
    append_le(end, at);
    append_le(end, kLocator64Mark);
    append_le(end, std::uint32_t{0});
    append_le(end, at + bytes);
    append_le(end, std::uint32_t{1});
  }
  const std::uint16_t count = static_cast<std::uint16_t>(std::min<std::uint64_t>(count_, kMax16));
  append_le(end, kEndMark);
  append_le(end, std::uint16_t{0});
  append_le(end, std::uint16_t{0});
  append_le(end, count);
  append_le(end, count);
  append_le(end, static_cast<std::uint32_t>(std::min<std::uint64_t>(bytes, kMax32)));
  append_le(end, static_cast<std::uint32_t>(std::min<std::uint64_t>(at, kMax32)));
  append_le(end, std::uint16_t{0});
  file_.write(end);
}

}  // namespace leadsman::loaders
