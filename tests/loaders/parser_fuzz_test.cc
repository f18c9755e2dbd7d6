// Mutations of good files: whatever comes in, nothing but an Error may come out (under the address
// sanitizer in the `asan` preset). Seeded: every run sees the same inputs. LEADSMAN_FUZZ_FACTOR=20
// in the environment makes it look at twenty times as many.
#include <algorithm>
#include <cstdlib>
#include <functional>
#include <random>
#include <string>
#include <vector>

#include <gtest/gtest.h>

#include "leadsman/bundle.h"
#include "leadsman/tensor_file.h"
#include "loaders/inflate.h"
#include "tests/loaders/graph_examples.h"
#include "tests/support/files.h"

namespace leadsman {
namespace {

using testing::read_file;
using testing::ScratchFolder;
using testing::write_file;

// A few of: a bit, a byte, a number of interest, bytes taken out, doubled or exchanged.
std::string mutated(std::string bytes, std::mt19937& random) {
  static const std::vector<std::string> kPieces = {"\xff\xff\xff\xff",
                                                   std::string(4, '\0'),
                                                   std::string("\0\0\0\x80", 4),
                                                   "[",
                                                   "]",
                                                   "{",
                                                   "}",
                                                   "\"",
                                                   ",",
                                                   ":",
                                                   "-1",
                                                   "0",
                                                   "1e999",
                                                   "99999999999999999999",
                                                   "null",
                                                   "PK\x03\x04",
                                                   "\\u0000",
                                                   "'",
                                                   "(",
                                                   ")",
                                                   "True",
                                                   "9223372036854775807"};
  const auto below = [&](std::size_t bound) { return bound == 0 ? 0 : random() % bound; };
  const std::size_t times = 1 + below(4);
  for (std::size_t i = 0; i < times && !bytes.empty(); ++i) {
    const std::size_t at = below(bytes.size());
    const std::size_t length = std::min(bytes.size() - at, 1 + below(16));
    const std::string& piece = kPieces[below(kPieces.size())];
    switch (below(8)) {
      case 0:
        bytes[at] = static_cast<char>(bytes[at] ^ (1 << below(8)));
        break;
      case 1:
        bytes[at] = static_cast<char>(below(256));
        break;
      case 2:
        bytes.replace(at, std::min(piece.size(), bytes.size() - at), piece);
        break;
      case 3:
        bytes.insert(at, piece);
        break;
      case 4:
        bytes.erase(at, length);
        break;
      case 5:
        bytes.insert(at, bytes.substr(at, length));
        break;
      case 6:
        bytes.resize(at);
        break;
      default:
        bytes.replace(at, length, bytes.substr(below(bytes.size()), length));
    }
  }
  return bytes;
}

struct Outcome {
  int passed = 0;
  int refused = 0;
};

// Runs `parse` on mutations of every seed.
Outcome fuzz(const std::vector<std::string>& seeds, unsigned seed, int rounds,
             const std::function<void(const std::string&)>& parse) {
  const char* const factor = std::getenv("LEADSMAN_FUZZ_FACTOR");
  if (factor != nullptr) rounds *= std::max(1, std::atoi(factor));
  std::mt19937 random(seed);
  Outcome outcome;
  for (int round = 0; round < rounds; ++round) {
    const std::string input =
        mutated(seeds[static_cast<std::size_t>(round) % seeds.size()], random);
    try {
      parse(input);
      ++outcome.passed;
    } catch (const Error& error) {
      EXPECT_EQ(error.kind(), ErrorKind::kInput) << error.what();
      EXPECT_EQ(std::string(error.what()).find('\x1b'), std::string::npos);
      ++outcome.refused;
    }
  }
  // The loop must reach both the checks and what lies behind them.
  EXPECT_GT(outcome.refused, rounds / 10);
  EXPECT_GT(outcome.passed, 0);
  return outcome;
}

void read_everything(const std::string& path) {
  const TensorFile file = TensorFile::open(path);
  for (const std::string& name : file.names()) {
    const Tensor tensor = file.read(name);
    float sum = 0;  // touch every value
    for (const float value : tensor.values()) sum += value;
    [[maybe_unused]] static volatile float sink;
    sink = sum;
  }
}

std::function<void(const std::string&)> as_file(const ScratchFolder& folder,
                                                const std::string& name) {
  return [path = folder / name](const std::string& bytes) {
    write_file(path, bytes);
    read_everything(path);
  };
}

const std::string kData = std::string(LEADSMAN_SOURCE_DIR) + "/tests/data/";

TEST(ParserFuzz, Safetensors) {
  const ScratchFolder folder;
  const NamedTensors tensors = {{"a", Tensor(Shape{2, 3})}, {"b.weight", Tensor(Shape{1, 2, 2})}};
  write_tensors(folder / "seed.safetensors", tensors, {{"k", "v"}});
  fuzz({read_file(kData + "safetensors/by_its_own_library.safetensors"),
        read_file(folder / "seed.safetensors")},
       1, 5000, as_file(folder, "x.safetensors"));
}

TEST(ParserFuzz, Npy) {
  const ScratchFolder folder;
  std::vector<std::string> seeds;
  for (const char* const name :
       {"f2_big", "fortran_rank4", "rank0", "version3", "empty", "b1_little"}) {
    seeds.push_back(read_file(kData + "npy/" + name + ".npy"));
  }
  fuzz(seeds, 2, 5000, as_file(folder, "x.npy"));
}

TEST(ParserFuzz, Npz) {
  const ScratchFolder folder;
  write_tensors(folder / "seed.npz", {{"a", Tensor(Shape{2, 3})}, {"b", Tensor(Shape{1})}});
  fuzz({read_file(folder / "seed.npz"), read_file(kData + "npy/all_zip64.npz"),
        read_file(kData + "npy/all_deflated.npz")},
       3, 4000, as_file(folder, "x.npz"));
}

TEST(ParserFuzz, Inflate) {
  // The deflated bytes alone: behind a checksum few mutations would get far.
  const std::string file = read_file(kData + "npy/all_deflated.npz");
  std::vector<std::string> seeds;
  for (std::size_t at = 0; (at = file.find("PK\x03\x04", at)) != std::string::npos; ++at) {
    const std::size_t next = file.find("PK", at + 4);
    seeds.push_back(file.substr(at + 60, next - at - 60));
  }
  ASSERT_GT(seeds.size(), 20u);
  std::vector<std::byte> room(20'000);
  fuzz(seeds, 4, 20000, [&](const std::string& bytes) {
    const auto packed = std::as_bytes(std::span(bytes));
    const std::size_t count = loaders::inflate_start(packed, room);
    loaders::inflate(packed, std::span(room).first(count));
  });
}

TEST(ParserFuzz, GraphJson) {
  fuzz({std::string(testing::kGraphText)}, 5, 10000,
       [](const std::string& text) { parse_graph(text, "graph.json"); });
}

TEST(ParserFuzz, Labels) {
  fuzz({"round\r\nsquare\nKn\xc3\xb6pfe\n\n"}, 6, 10000,
       [](const std::string& text) { parse_labels(text, "labels.txt"); });
}

TEST(ParserFuzz, EveryTruncationOfEveryFormat) {
  const ScratchFolder folder;
  for (const char* const name : {"x.safetensors", "x.npz", "x.npy"}) {
    write_tensors(folder / name, {{"x", Tensor(Shape{2, 3})}});
    const std::string whole = read_file(folder / name);
    for (std::size_t length = 0; length < whole.size(); ++length) {
      write_file(folder / name, whole.substr(0, length));
      EXPECT_THROW(read_everything(folder / name), Error) << name << " cut to " << length;
    }
  }
}

}  // namespace
}  // namespace leadsman
