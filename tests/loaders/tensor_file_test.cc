#include "leadsman/tensor_file.h"

#include <bit>
#include <cmath>
#include <cstring>
#include <filesystem>
#include <limits>
#include <sstream>
#include <string>
#include <vector>

#include <gtest/gtest.h>
#include <unistd.h>

#include "loaders/atomic_file.h"
#include "loaders/npy_header.h"
#include "loaders/zip.h"
#include "tests/support/files.h"

namespace leadsman {
namespace {

using testing::input_error;
using testing::read_file;
using testing::ScratchFolder;
using testing::usage_error;
using testing::write_file;

const std::string kData = std::string(LEADSMAN_SOURCE_DIR) + "/tests/data/";

Tensor counted(const Shape& shape, float start) {
  Tensor tensor(shape);
  float* const data = tensor.mutable_data();
  for (std::int64_t i = 0; i < tensor.elements(); ++i) data[i] = start + static_cast<float>(i) / 8;
  return tensor;
}

void expect_same(const Tensor& actual, const Tensor& expected, const std::string& what) {
  ASSERT_EQ(actual.shape(), expected.shape()) << what;
  if (expected.elements() == 0) return;  // memcmp wants no null pointers
  EXPECT_EQ(std::memcmp(actual.data(), expected.data(), expected.values().size_bytes()), 0) << what;
}

struct StoredCase {
  std::string name;
  Tensor expected;
};

// What NumPy 1.26.4 makes of each array (tests/loaders/make_tensor_cases.py).
std::vector<StoredCase> stored_cases() {
  std::istringstream list(read_file(kData + "npy/cases.txt"));
  const std::string values = read_file(kData + "npy/expected.f32");
  std::size_t at = 0;
  std::vector<StoredCase> cases;
  for (std::string line; std::getline(list, line);) {
    std::istringstream words(line);
    std::string name;
    words >> name;
    std::vector<std::int64_t> sizes;
    for (std::int64_t size; words >> size;) sizes.push_back(size);
    Tensor expected{Shape(sizes)};
    const std::size_t bytes = expected.values().size_bytes();
    EXPECT_LE(at + bytes, values.size());
    if (bytes > 0) std::memcpy(expected.mutable_data(), values.data() + at, bytes);
    at += bytes;
    cases.push_back({name, expected});
  }
  EXPECT_EQ(at, values.size());
  return cases;
}

TEST(TensorFile, ReadsNpyAsNumpyDoes) {
  const std::vector<StoredCase> cases = stored_cases();
  ASSERT_GT(cases.size(), 30u);
  for (const StoredCase& stored : cases) {
    const TensorFile file = TensorFile::open(kData + "npy/" + stored.name + ".npy");
    ASSERT_EQ(file.names(), std::vector<std::string>{stored.name});
    expect_same(file.read_only(), stored.expected, stored.name);
  }
}

TEST(TensorFile, ReadsNpzAsNumpyDoes) {
  for (const char* const name : {"all_stored.npz", "all_deflated.npz", "all_zip64.npz"}) {
    const TensorFile file = TensorFile::open(kData + "npy/" + name);
    int found = 0;
    for (const StoredCase& stored : stored_cases()) {
      if (!file.has(stored.name)) continue;  // the versions of NPY are not in the archives
      ++found;
      expect_same(file.read(stored.name), stored.expected, name + (": " + stored.name));
    }
    EXPECT_EQ(found, 29) << name;
  }
  const TensorFile file = TensorFile::open(kData + "npy/all_deflated.npz");
  const Tensor smooth = file.read("smooth");
  for (std::int64_t i = 0; i < 3000; ++i)
    ASSERT_EQ(smooth.data()[i], static_cast<float>(i / 7)) << i;
  const Tensor zeros = file.read("zeros");
  for (const float value : zeros.values()) ASSERT_EQ(value, 0.0f);
  // Value k as often as the k-th Fibonacci number.
  std::vector<std::int64_t> counts(20);
  const Tensor skewed = file.read("skewed");
  for (const float value : skewed.values()) ++counts[static_cast<std::size_t>(value)];
  EXPECT_EQ(counts[0], 1);
  for (std::size_t k = 2; k < 20; ++k) EXPECT_EQ(counts[k], counts[k - 1] + counts[k - 2]) << k;
}

// Written by the safetensors package 0.8.0 (tests/loaders/make_tensor_cases.py).
TEST(TensorFile, ReadsSafetensorsOfTheFormatsOwnLibrary) {
  const TensorFile file = TensorFile::open(kData + "safetensors/by_its_own_library.safetensors");
  EXPECT_EQ(file.metadata(),
            (Metadata{{"made by", "make_tensor_cases.py"}, {"umlaut", "Kn\xc3\xb6pfe"}}));
  int found = 0;
  for (const StoredCase& stored : stored_cases()) {
    if (!file.has(stored.name)) continue;
    ++found;
    expect_same(file.read(stored.name), stored.expected, stored.name);
  }
  EXPECT_EQ(found, 18);
  EXPECT_EQ(file.info("i8_little").type, ElementType::kI64);
  EXPECT_EQ(file.info("f2_little").type, ElementType::kF16);
  EXPECT_EQ(file.info("b1_little").type, ElementType::kBool);
}

TEST(TensorFile, WritesAndReadsBack) {
  const ScratchFolder folder;
  const NamedTensors tensors = {{"z last", counted({2, 3}, 1)},
                                {"a/b.weight", counted({4, 1, 3, 3}, -7)},
                                {"Kn\xc3\xb6pfe", counted({5}, 0.5f)},
                                {"scalar", counted({}, 3)},
                                {"empty", Tensor(Shape{0, 4})}};
  for (const char* const name : {"all.safetensors", "all.npz"}) {
    write_tensors(folder / name, tensors);
    const TensorFile file = TensorFile::open(folder / name);
    ASSERT_EQ(file.names().size(), tensors.size());
    for (std::size_t i = 0; i < tensors.size(); ++i) {
      EXPECT_EQ(file.names()[i], tensors[i].first);  // the order is kept
      EXPECT_EQ(file.info(tensors[i].first).type, ElementType::kF32);
      expect_same(file.read(tensors[i].first), tensors[i].second, tensors[i].first);
    }
    const std::string first = read_file(folder / name);
    write_tensors(folder / name, tensors);
    EXPECT_TRUE(first == read_file(folder / name)) << "the bytes depend on more than the arguments";
  }
  for (const auto& [name, tensor] : tensors) {
    write_tensors(folder / "one.npy", {{name, tensor}});
    expect_same(TensorFile::open(folder / "one.npy").read_only(), tensor, name);
  }
  write_tensors(folder / "none.safetensors", {});
  write_tensors(folder / "none.npz", {});
  EXPECT_TRUE(TensorFile::open(folder / "none.safetensors").names().empty());
  EXPECT_TRUE(TensorFile::open(folder / "none.npz").names().empty());
}

TEST(TensorFile, KeepsMetadata) {
  const ScratchFolder folder;
  const Metadata metadata = {{"leadsman_graph", "{\"a\": [1, 2]}\n"},
                             {"\"\\\x01", "Kn\xc3\xb6pfe"}};
  write_tensors(folder / "m.safetensors", {{"x", counted({2}, 0)}}, metadata);
  EXPECT_EQ(TensorFile::open(folder / "m.safetensors").metadata(), metadata);
}

// NumPy 1.24 and 1.26 wrote the same bytes for these.
TEST(TensorFile, WritesNpyByteForByteAsNumpyDoes) {
  const ScratchFolder folder;
  for (const char* const name : {"f4_little", "rank0", "rank1", "rank6", "empty"}) {
    const std::string path = kData + "npy/" + name + ".npy";
    write_tensors(folder / "x.npy", {{"x", TensorFile::open(path).read_only()}});
    EXPECT_TRUE(read_file(folder / "x.npy") == read_file(path)) << name;
  }
}

TEST(TensorFile, BorrowsAlignedFloatsAndCopiesOthers) {
  const ScratchFolder folder;
  // Headers of 64, 65, 66 and 67 bytes: data at multiples of 4 and not.
  for (std::size_t padding = 0; padding < 4; ++padding) {
    std::string header = R"({"x":{"dtype":"F32","shape":[2],"data_offsets":[0,8]}})";
    header.append(64 - header.size() + padding, ' ');
    std::string bytes(8, '\0');
    bytes[0] = static_cast<char>(header.size());
    const float values[2] = {1.5f, -2.25f};
    bytes += header;
    bytes.append(reinterpret_cast<const char*>(values), sizeof(values));
    const std::string path = folder / ("pad" + std::to_string(padding) + ".safetensors");
    write_file(path, bytes);
    const TensorFile file = TensorFile::open(path);
    const Tensor first = file.read("x");
    expect_same(first, Tensor(Shape{2}, {1.5f, -2.25f}), path);
    EXPECT_EQ(first.data() == file.read("x").data(), padding == 0) << padding;
  }
}

TEST(TensorFile, BorrowedTensorsOutliveTheFile) {
  const ScratchFolder folder;
  const Tensor expected = counted({100}, 0);
  write_tensors(folder / "x.safetensors", {{"x", expected}});
  Tensor kept;
  {
    const TensorFile file = TensorFile::open(folder / "x.safetensors");
    kept = file.read("x");
  }
  write_tensors(folder / "x.safetensors", {{"x", counted({50}, 9)}});  // replaced by rename
  std::filesystem::remove(folder / "x.safetensors");
  expect_same(kept, expected, "kept");
  kept.mutable_data()[0] = 5;  // copied first: the mapping is read-only
  EXPECT_EQ(kept.data()[0], 5.0f);
}

// Pages of files that this process has mapped and read: proc(5), /proc/PID/statm, "shared".
std::int64_t shared_pages() {
  std::istringstream words(read_file("/proc/self/statm"));
  std::int64_t size = 0;
  std::int64_t resident = 0;
  std::int64_t shared = 0;
  words >> size >> resident >> shared;
  return shared;
}

TEST(TensorFile, ReleasedTensorsLeaveMemoryAndKeepTheirValues) {
  const ScratchFolder folder;
  const Tensor written = counted({1 << 20}, 0.5F);  // 1,024 pages of 4 KiB
  write_tensors(folder / "big.safetensors", {{"a", written}});
  const Tensor tensor = TensorFile::open(folder / "big.safetensors").read("a");
  expect_same(tensor, written, "as read");
  const std::int64_t before = shared_pages();
  tensor.release();
  const std::int64_t page = ::sysconf(_SC_PAGESIZE);
  EXPECT_LE(shared_pages(), before - (4 << 20) / page + 64);
  expect_same(tensor, written, "as read again");
}

TEST(TensorFile, RecognisesFormatsByTheirBytes) {
  const ScratchFolder folder;
  write_tensors(folder / "a.npy", {{"x", counted({2}, 1)}});
  write_tensors(folder / "a.npz", {{"x", counted({2}, 1)}});
  write_tensors(folder / "a.safetensors", {{"x", counted({2}, 1)}});
  for (const char* const extension : {".npy", ".npz", ".safetensors"}) {
    std::filesystem::copy_file(folder / ("a" + std::string(extension)), folder / "b.other",
                               std::filesystem::copy_options::overwrite_existing);
    expect_same(TensorFile::open(folder / "b.other").read_only(), counted({2}, 1), extension);
  }
}

TEST(TensorFile, ListsWhatItCannotReadAndSaysWhy) {
  const ScratchFolder folder;
  std::string header = R"({"wide":{"dtype":"F32","shape":[1,1,1,1,1,1,1],"data_offsets":[0,4]},)"
                       R"("far":{"dtype":"F64","shape":[2],"data_offsets":[4,20]}})";
  std::string bytes(8, '\0');
  bytes[0] = static_cast<char>(header.size());
  const double far[2] = {1.0, 1e300};
  bytes += header + std::string(4, '\0');
  bytes.append(reinterpret_cast<const char*>(far), sizeof(far));
  const std::string path = folder / "x.safetensors";
  write_file(path, bytes);
  const TensorFile file = TensorFile::open(path);
  EXPECT_EQ(file.info("wide").shape.size(), 7u);
  EXPECT_EQ(input_error([&] { file.read("wide"); }),
            path + ": tensor 'wide': a tensor of rank 7 (at most 6)");
  EXPECT_EQ(input_error([&] { file.read("far"); }),
            path + ": tensor 'far': the value 1.0000000000000001e+300 is beyond float32");
  EXPECT_EQ(input_error([&] { file.read("fur"); }),
            path + ": no tensor is called 'fur'; nearest: 'far'");
  EXPECT_EQ(input_error([&] { file.read_only(); }), path + ": holds 2 tensors where one is wanted");
}

TEST(TensorFile, RefusesToWriteWhatCannotBeReadBack) {
  const ScratchFolder folder;
  const Tensor x = counted({1}, 0);
  struct Case {
    std::string name;
    NamedTensors tensors;
    Metadata metadata;
    std::string message;
  };
  const std::vector<Case> cases = {
      {"a.txt",
       {{"x", x}},
       {},
       "tensors are written to .safetensors, .npz or .npy files, not to '.txt'"},
      {"a",
       {{"x", x}},
       {},
       "tensors are written to .safetensors, .npz or .npy files, not to a file without extension"},
      {"a.npz", {{"x", x}, {"x", x}}, {}, "two tensors are called 'x'"},
      {"a.npz", {{"", x}}, {}, "a tensor without a name cannot be written"},
      {"a.npz", {{"x\xff", x}}, {}, "the tensor name 'x\\xff' is not UTF-8"},
      {"a.npz", {{std::string("x\0y", 3), x}}, {}, "no zero byte can stand in a name: 'x\\x00y'"},
      {"a.npz",
       {{std::string(65532, 'x'), x}},
       {},
       "a name of 65532 bytes is too long for an .npz file"},
      {"a.npz", {{"x", x}}, {{"k", "v"}}, "an .npz file cannot hold metadata"},
      {"a.npy", {{"x", x}, {"y", x}}, {}, "an .npy file holds one tensor, not 2"},
      {"a.npy", {}, {}, "an .npy file holds one tensor, not 0"},
      {"a.safetensors", {{"__metadata__", x}}, {}, "no tensor can be called '__metadata__'"},
      {"a.safetensors", {{"x", x}}, {{"k", "\xff"}}, "the metadata under 'k' is not UTF-8"},
  };
  for (const Case& bad : cases) {
    EXPECT_EQ(usage_error([&] { write_tensors(folder / bad.name, bad.tensors, bad.metadata); }),
              folder / bad.name + ": " + bad.message);
  }
  EXPECT_EQ(folder.count(), 0u);
}

// Every size and offset in 64 bits, as files above 4 GiB need it.
TEST(TensorFile, ReadsBackZip64) {
  const ScratchFolder folder;
  const Tensor a = counted({3, 5}, 0);
  const Tensor b = counted({7}, 2);
  for (const std::uint64_t limit : {0u, 100u, 300u, 100'000u}) {
    const std::string path = folder / "x.npz";
    loaders::AtomicFile file(path);
    loaders::ZipWriter zip(file, limit);
    zip.add("a.npy", loaders::format_npy_header(a.shape()), std::as_bytes(a.values()));
    zip.add("b.npy", loaders::format_npy_header(b.shape()), std::as_bytes(b.values()));
    zip.finish();
    file.commit();
    const TensorFile read = TensorFile::open(path);
    expect_same(read.read("a"), a, "a");
    expect_same(read.read("b"), b, "b");
  }
}

TEST(ElementType, HasANameAndASize) {
  EXPECT_EQ(element_type_name(ElementType::kBF16), "BF16");
  EXPECT_EQ(element_bytes(ElementType::kBool), 1);
  EXPECT_EQ(element_bytes(ElementType::kF64), 8);
  EXPECT_TRUE(is_floating(ElementType::kBF16));
  EXPECT_FALSE(is_floating(ElementType::kI64));
}

}  // namespace
}  // namespace leadsman
