// Broken .npz files: what each is told, word for word.
#include <string>
#include <vector>

#include <gtest/gtest.h>

#include "leadsman/tensor_file.h"
#include "loaders/crc32.h"
#include "tests/loaders/tensor_bytes.h"
#include "tests/support/files.h"

namespace leadsman {
namespace {

using testing::input_error;
using testing::le;
using testing::npy_bytes;
using testing::patched;
using testing::read_file;
using testing::ScratchFolder;
using testing::write_file;

using U16 = std::uint16_t;
using U32 = std::uint32_t;

// One entry of a zip as its records say it, each number open to be made wrong.
struct Entry {
  std::string name = "x.npy";
  std::string bytes = npy_bytes("{'descr': '<f4', 'fortran_order': False, 'shape': (2,)}", 8);
  U16 flags = 0;
  U16 method = 0;
  U32 unpacked = 0;             // 0: the length of `bytes`
  std::string local_name = {};  // empty: `name`
};

struct Zip {
  std::string bytes;
  std::size_t directory = 0;  // where the first directory record lies
  std::size_t end = 0;        // where the end record lies
};

Zip make_zip(const std::vector<Entry>& entries) {
  Zip zip;
  std::string directory;
  for (const Entry& entry : entries) {
    const U32 packed = static_cast<U32>(entry.bytes.size());
    const U32 unpacked = entry.unpacked != 0 ? entry.unpacked : packed;
    const U32 crc = loaders::crc32(std::as_bytes(std::span(entry.bytes)));
    const auto common = [&](const std::string& name) {
      return le(U16{20}) + le(entry.flags) + le(entry.method) + le(U32{0}) + le(crc) + le(packed) +
             le(unpacked) + le(static_cast<U16>(name.size())) + le(U16{0});
    };
    const std::string local = entry.local_name.empty() ? entry.name : entry.local_name;
    directory += le(U32{0x02014b50}) + le(U16{20}) + common(entry.name) + le(U16{0}) + le(U16{0}) +
                 le(U16{0}) + le(U32{0}) + le(static_cast<U32>(zip.bytes.size())) + entry.name;
    zip.bytes += le(U32{0x04034b50}) + common(local) + local + entry.bytes;
  }
  zip.directory = zip.bytes.size();
  zip.bytes += directory;
  zip.end = zip.bytes.size();
  const U16 count = static_cast<U16>(entries.size());
  zip.bytes += le(U32{0x06054b50}) + le(U16{0}) + le(U16{0}) + le(count) + le(count) +
               le(static_cast<U32>(directory.size())) + le(static_cast<U32>(zip.directory)) +
               le(U16{0});
  return zip;
}

TEST(BadNpz, TheHelperMakesGoodFiles) {
  const ScratchFolder folder;
  write_file(folder / "good.npz",
             make_zip({{}, {"folder/", ""}, {"y.npy"}, {"notes.txt", "hi"}}).bytes);
  const TensorFile file = TensorFile::open(folder / "good.npz");
  EXPECT_EQ(file.names(), (std::vector<std::string>{"x", "y"}));
  EXPECT_EQ(file.read("x").shape(), Shape{2});
  // A comment behind the end record.
  const Zip zip = make_zip({{}});
  write_file(folder / "good.npz", patched(zip.bytes, zip.end + 20, le(U16{5})) + "hello");
  EXPECT_EQ(TensorFile::open(folder / "good.npz").names().size(), 1u);
}

TEST(BadNpz, WhatOpeningSays) {
  const Zip zip = make_zip({{}});
  const Zip two = make_zip({{}, {"y.npy"}});
  const std::size_t record = zip.directory;
  const auto directory_says = [&](std::size_t bytes, std::size_t at) {
    return "zip: the directory is said to take " + std::to_string(bytes) + " bytes from " +
           std::to_string(at) + ", its end record begins at " + std::to_string(zip.end);
  };
  const std::string size = std::to_string(zip.directory - 35);
  struct Case {
    std::string bytes;
    std::string message;
  };
  const std::vector<Case> cases = {
      {"PK\x03\x04", "zip: holds too few bytes for its end record"},
      {zip.bytes.substr(0, zip.bytes.size() - 1),
       "zip: no end record; the file may have been cut short"},
      {zip.bytes + "x", "zip: no end record; the file may have been cut short"},
      {zip.bytes.substr(0, zip.end), "zip: no end record; the file may have been cut short"},
      {patched(zip.bytes, zip.end + 4, "\x01"), "zip: archives in several parts are not read"},
      {patched(zip.bytes, zip.end + 8, "\x02"), "zip: archives in several parts are not read"},
      {patched(zip.bytes, zip.end + 12, le(U32{7})), directory_says(7, zip.directory)},
      {patched(zip.bytes, zip.end + 16, le(U32{0xfffffff0})), directory_says(51, 0xfffffff0)},
      {patched(zip.bytes, zip.end + 8, std::string_view("\2\0\2", 3)),
       "zip: the directory is damaged at byte " + std::to_string(zip.end)},
      {patched(zip.bytes, zip.end + 8, std::string_view("\0\0\0", 3)),
       "zip: the directory holds more than its entries"},
      {patched(zip.bytes, record, "XX"),
       "zip: the directory is damaged at byte " + std::to_string(record)},
      {patched(zip.bytes, record + 28, le(U16{999})),
       "zip: the directory is damaged at byte " + std::to_string(record)},
      {patched(zip.bytes, record + 42, le(U32{1})),
       "zip: entry 'x.npy': no local record at byte 1"},
      {patched(zip.bytes, record + 42, le(U32{0xfffffffe})),
       "zip: entry 'x.npy': no local record at byte 4294967294"},
      {patched(zip.bytes, record + 42, le(U32{0xffffffff})),
       "zip: entry 'x.npy': no local record at byte 4294967295"},
      {patched(zip.bytes, record + 20, le(U32{200}) + le(U32{200})),
       "zip: entry 'x.npy': its 200 bytes run into the directory"},
      {patched(zip.bytes, record + 24, le(U32{200})),
       "zip: entry 'x.npy': is stored, yet takes " + size + " bytes for 200"},
      {patched(zip.bytes, 26, le(U16{60000})),
       "zip: entry 'x.npy': its " + size + " bytes run into the directory"},
      {make_zip({{.flags = 1}}).bytes, "zip: entry 'x.npy': is encrypted"},
      {make_zip({{.method = 14}}).bytes,
       "zip: entry 'x.npy': compression method 14 is not known (stored and deflated entries are "
       "read)"},
      {make_zip({{.method = 8, .unpacked = 4000000}}).bytes,
       "zip: entry 'x.npy': " + size + " bytes cannot unpack to 4000000"},
      {make_zip({{.local_name = "y.npy"}}).bytes,
       "zip: entry 'x.npy': its local record calls it 'y.npy'"},
      {make_zip({{.name = "\xff.npy"}}).bytes,
       "zip: entry '\\xff.npy': the name is empty or not UTF-8"},
      {make_zip({{}, {}}).bytes, "zip: two entries are called 'x.npy'"},
      {patched(two.bytes, two.directory + 51 + 42, le(U32{0})),
       "zip: entry 'y.npy': its local record calls it 'x.npy'"},
      {make_zip({{"notes.txt", "hi"}}).bytes, "is a zip without .npy entries: not an .npz file"},
      {make_zip({{".npy"}}).bytes, "an entry is called '.npy': a tensor without a name"},
      {make_zip({{"x.npy", "short"}}).bytes, "tensor 'x': does not begin with an NPY header"},
      {make_zip({{"x.npy", ""}}).bytes, "tensor 'x': does not begin with an NPY header"},
      {make_zip(
           {{"x.npy", npy_bytes("{'descr': '<f4', 'fortran_order': False, 'shape': (2,)}", 4)}})
           .bytes,
       "tensor 'x': an array [2] of F32 takes 8 bytes, 4 follow the header"},
      {make_zip({{"x.npy", npy_bytes("{}", 0)}}).bytes, "tensor 'x': NPY header: descr is missing"},
      {make_zip({{"x.npy", patched(npy_bytes("{}", 8), 8, "\x40")}}).bytes,
       "tensor 'x': the NPY header is cut short"},
      {make_zip({{.bytes = "\x07", .method = 8}}).bytes,
       "tensor 'x': the deflated bytes are damaged"},
  };
  const ScratchFolder folder;
  const std::string path = folder / "bad.npz";
  for (const Case& bad : cases) {
    write_file(path, bad.bytes);
    EXPECT_EQ(input_error([&] { TensorFile::open(path); }), path + ": " + bad.message);
  }
}

TEST(BadNpz, OverlappingEntriesAreRefused) {
  // The second entry's records lie inside the first one's bytes.
  const Entry inner = {"y.npy"};
  const Zip nested = make_zip({inner});
  Entry outer = {"x.npy", nested.bytes.substr(0, nested.directory)};
  Zip zip = make_zip({outer, inner});
  const std::size_t first = 30 + 5;  // where the outer entry's bytes begin
  zip.bytes = patched(zip.bytes, zip.directory + 51 + 42, le(static_cast<U32>(first)));
  const ScratchFolder folder;
  write_file(folder / "bad.npz", zip.bytes);
  EXPECT_EQ(input_error([&] { TensorFile::open(folder / "bad.npz"); }),
            folder / "bad.npz: zip: entry 'y.npy': overlaps with another entry");
}

TEST(BadNpz, DamagedBytesAreFoundWhenRead) {
  const std::string data = std::string(LEADSMAN_SOURCE_DIR) + "/tests/data/npy/";
  const ScratchFolder folder;
  const std::string path = folder / "bad.npz";
  // The last byte of the data of a stored entry, and of a deflated one: just before the next
  // record.
  for (const char* const name : {"all_stored.npz", "all_deflated.npz"}) {
    std::string bytes = read_file(data + name);
    const std::size_t second = bytes.find("PK\x03\x04", 4);
    bytes[second - 6] = static_cast<char>(bytes[second - 6] ^ 0x40);
    write_file(path, bytes);
    const TensorFile file = TensorFile::open(path);
    const std::string message = input_error([&] { file.read(file.names().front()); });
    EXPECT_TRUE(
        message ==
            path + ": tensor 'b1_little': the checksum (CRC-32) is wrong: the bytes are damaged" ||
        message == path + ": tensor 'b1_little': the deflated bytes are damaged")
        << message;
    file.read(file.names().back());  // the others are whole
  }
}

TEST(BadNpz, Zip64RecordsAreChecked) {
  const std::string good =
      read_file(std::string(LEADSMAN_SOURCE_DIR) + "/tests/data/npy/all_zip64.npz");
  const std::size_t locator = good.rfind("PK\x06\x07");
  const std::size_t end64 = good.rfind("PK\x06\x06");
  const std::string wrong_place = "zip: the zip64 end record is not where its locator says";
  const std::vector<std::pair<std::string, std::string>> cases = {
      {patched(good, locator + 8, le(std::uint64_t{0})), wrong_place},
      {patched(good, locator + 8, le(std::uint64_t{0xffffffffffffffff})), wrong_place},
      {patched(good, locator + 8, le(static_cast<std::uint64_t>(locator))), wrong_place},
      {patched(good, end64 + 16, le(U32{1})), "zip: archives in several parts are not read"},
      {patched(good, end64 + 24, le(std::uint64_t{1})),
       "zip: archives in several parts are not read"},
      {patched(good, end64 + 48, le(std::uint64_t{1} << 63)),
       "zip: the directory is said to take "},
  };
  const ScratchFolder folder;
  const std::string path = folder / "bad.npz";
  for (const auto& [bytes, message] : cases) {
    write_file(path, bytes);
    EXPECT_EQ(
        input_error([&] { TensorFile::open(path); }).substr(0, (path + ": " + message).size()),
        path + ": " + message);
  }
}

}  // namespace
}  // namespace leadsman
