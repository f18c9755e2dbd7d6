// Files exchanged with NumPy, both ways, where Python with NumPy is installed.
#include <array>
#include <cstdio>
#include <cstdlib>
#include <cstring>
#include <memory>
#include <string>
#include <vector>

#include <gtest/gtest.h>

#include "leadsman/tensor_file.h"
#include "loaders/atomic_file.h"
#include "loaders/npy_header.h"
#include "loaders/zip.h"
#include "tests/support/files.h"

namespace leadsman {
namespace {

using testing::ScratchFolder;

std::string output_of(const std::string& command) {
  const std::unique_ptr<FILE, int (*)(FILE*)> pipe(::popen((command + " 2>&1").c_str(), "r"),
                                                   ::pclose);
  std::string output;
  std::array<char, 4096> buffer;
  while (pipe != nullptr && std::fgets(buffer.data(), buffer.size(), pipe.get()) != nullptr) {
    output += buffer.data();
  }
  return output;
}

// A Python that has NumPy; "" when there is none. LEADSMAN_PYTHON names one to be preferred.
std::string python_with_numpy() {
  const char* const preferred = std::getenv("LEADSMAN_PYTHON");
  for (const std::string& python : {std::string(preferred == nullptr ? "" : preferred),
                                    std::string("python3"), std::string("/usr/bin/python3")}) {
    if (!python.empty() && output_of(python + " -c 'import numpy; print(7 * 6)'") == "42\n") {
      return python;
    }
  }
  return "";
}

Tensor counted(const Shape& shape) {
  Tensor tensor(shape);
  float* const data = tensor.mutable_data();
  for (std::int64_t i = 0; i < tensor.elements(); ++i) data[i] = static_cast<float>(i) / 4 - 3;
  return tensor;
}

TEST(NumpyLive, FilesGoBothWays) {
  const std::string python = python_with_numpy();
  if (python.empty()) GTEST_SKIP() << "no Python with NumPy";
  const ScratchFolder folder;
  const NamedTensors tensors = {{"scalar", counted({})},
                                {"vector", counted({5})},
                                {"a/b.weight", counted({2, 3, 4, 5})},
                                {"Kn\xc3\xb6pfe", counted({1, 7})},
                                {"empty", counted({0, 3})}};
  write_tensors(folder / "to_numpy.npz", tensors);
  write_tensors(folder / "to_numpy.npy", {tensors[2]});
  write_tensors(folder / "to_numpy.safetensors", tensors, {{"umlaut", "Kn\xc3\xb6pfe"}});
  {
    loaders::AtomicFile file(folder / "to_numpy64.npz");
    loaders::ZipWriter zip(file, 200);
    for (const auto& [name, tensor] : tensors) {
      zip.add(name + ".npy", loaders::format_npy_header(tensor.shape()),
              std::as_bytes(tensor.values()));
    }
    zip.finish();
    file.commit();
  }
  const std::string script = std::string(LEADSMAN_SOURCE_DIR) + "/tests/loaders/numpy_live.py";
  const std::string output =
      output_of(python + " '" + script + "' '" + folder.path() + "' 20240612");
  ASSERT_EQ(output.substr(0, 19), "checked with numpy ") << output;
  RecordProperty("checked_with", output);

  const TensorFile expected = TensorFile::open(folder / "expected.npz");
  ASSERT_EQ(expected.names().size(), 110u);
  const auto compare = [&](const TensorFile& file, const std::string& name) {
    const Tensor want = expected.read(name);
    const Tensor got = file.read(name);
    ASSERT_EQ(got.shape().to_string(), want.shape().to_string()) << file.path() << " " << name;
    if (want.elements() == 0) return;
    EXPECT_EQ(std::memcmp(got.data(), want.data(), want.values().size_bytes()), 0)
        << file.path() << " " << name;
  };
  for (const char* const name : {"from_numpy.npz", "from_numpy_packed.npz"}) {
    const TensorFile file = TensorFile::open(folder / name);
    ASSERT_EQ(file.names().size(), 110u);
    for (const std::string& tensor : file.names()) compare(file, tensor);
  }
  for (int i = 0; i < 30; ++i) {
    const std::string name = std::to_string(i);
    compare(TensorFile::open(folder / (name + ".npy")), name);
  }
}

}  // namespace
}  // namespace leadsman
