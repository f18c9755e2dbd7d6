#include "loaders/inflate.h"

#include <algorithm>
#include <array>
#include <cstdint>

#include "leadsman/error.h"

namespace leadsman::loaders {
namespace {

constexpr int kMaxCodeBits = 15;
constexpr int kFastBits = 10;
constexpr std::size_t kMaxSymbols = 288;
constexpr unsigned kEndOfBlock = 256;

[[noreturn]] void fail() {
  throw_input("the deflated bytes are damaged");
}

// Bits come lowest first within each byte.
class BitReader {
 public:
  explicit BitReader(std::span<const std::byte> from) : from_(from) {}

  // The next bits, zeros past the end; at least kMaxCodeBits of them.
  std::uint32_t peek() {
    while (count_ <= 24 && at_ < from_.size()) {
      bits_ |= std::to_integer<std::uint32_t>(from_[at_++]) << count_;
      count_ += 8;
    }
    return bits_;
  }
  void drop(int count) {
    if (count > count_) fail();
    bits_ >>= count;
    count_ -= count;
  }
  std::uint32_t take(int count) {
    const std::uint32_t value = peek() & ((1u << count) - 1u);
    drop(count);
    return value;
  }
  void to_byte() { drop(count_ % 8); }
  // Whole bytes; requires to_byte() before.
  void copy(std::span<std::byte> to) {
    std::size_t i = 0;
    for (; i < to.size() && count_ > 0; ++i) to[i] = static_cast<std::byte>(take_buffered());
    if (to.size() - i > from_.size() - at_) fail();
    std::copy_n(from_.begin() + static_cast<std::ptrdiff_t>(at_), to.size() - i,
                to.begin() + static_cast<std::ptrdiff_t>(i));
    at_ += to.size() - i;
  }
  // True when nothing but the last byte's padding is left.
  bool at_end() const { return at_ == from_.size() && count_ < 8; }

 private:
  std::uint32_t take_buffered() {
    const std::uint32_t value = bits_ & 0xffu;
    drop(8);
    return value;
  }

  std::span<const std::byte> from_;
  std::size_t at_ = 0;
  std::uint32_t bits_ = 0;
  int count_ = 0;
};

// A canonical Huffman code, given by the length of each symbol's code (0: not used).
class Code {
 public:
  // As zlib, `lenient` lets a code of at most one word, of one bit, leave the other word unused.
  void build(std::span<const std::uint8_t> lengths, bool lenient) {
    counts_.fill(0);
    for (const std::uint8_t length : lengths) ++counts_[length];
    counts_[0] = 0;
    int left = 1;  // codes of the length at hand that are still free
    int longest = 0;
    std::array<std::uint16_t, kMaxCodeBits + 2> first{};
    std::array<std::uint32_t, kMaxCodeBits + 2> next{};
    for (int length = 1; length <= kMaxCodeBits; ++length) {
      const std::size_t l = static_cast<std::size_t>(length);
      left = left * 2 - counts_[l];
      if (left < 0) fail();
      if (counts_[l] > 0) longest = length;
      first[l + 1] = static_cast<std::uint16_t>(first[l] + counts_[l]);
      next[l + 1] = (next[l] + counts_[l]) << 1;
    }
    if (left > 0 && longest > (lenient ? 1 : 0)) fail();
    fast_.fill(0);
    for (std::size_t symbol = 0; symbol < lengths.size(); ++symbol) {
      const std::size_t l = lengths[symbol];
      if (l == 0) continue;
      symbols_[first[l]++] = static_cast<std::uint16_t>(symbol);
      const std::uint32_t word = next[l]++;
      if (l > kFastBits) continue;
      std::uint32_t reversed = 0;
      for (std::size_t bit = 0; bit < l; ++bit) reversed |= (word >> bit & 1u) << (l - 1 - bit);
      for (std::uint32_t i = reversed; i < fast_.size(); i += 1u << l) {
        fast_[i] = static_cast<std::uint16_t>(symbol << 4 | l);
      }
    }
  }

  unsigned read(BitReader& reader) const {
    std::uint32_t bits = reader.peek();
    const std::uint16_t entry = fast_[bits & ((1u << kFastBits) - 1u)];
    if (entry != 0) {
      reader.drop(entry & 15);
      return entry >> 4;
    }
    // Word by word of each length: they are consecutive numbers, beginning at `start`.
    int word = 0;
    int start = 0;
    int index = 0;
    for (int length = 1; length <= kMaxCodeBits; ++length) {
      word |= static_cast<int>(bits & 1u);
      bits >>= 1;
      const int count = counts_[static_cast<std::size_t>(length)];
      if (word - count < start) {
        reader.drop(length);
        return symbols_[static_cast<std::size_t>(index + word - start)];
      }
      index += count;
      start = (start + count) << 1;
      word <<= 1;
    }
    fail();
  }

 private:
  std::array<std::uint16_t, kMaxCodeBits + 1> counts_{};
  std::array<std::uint16_t, kMaxSymbols> symbols_{};               // in the order of their words
  std::array<std::uint16_t, std::size_t{1} << kFastBits> fast_{};  // symbol << 4 | length; 0: none
};

struct Codes {
  Code literals;
  Code distances;
};

void fixed_codes(Codes& codes) {
  std::array<std::uint8_t, kMaxSymbols> lengths{};
  std::fill(lengths.begin(), lengths.begin() + 144, std::uint8_t{8});
  std::fill(lengths.begin() + 144, lengths.begin() + 256, std::uint8_t{9});
  std::fill(lengths.begin() + 256, lengths.begin() + 280, std::uint8_t{7});
  std::fill(lengths.begin() + 280, lengths.end(), std::uint8_t{8});
  codes.literals.build(lengths, false);
  std::fill(lengths.begin(), lengths.begin() + 32, std::uint8_t{5});
  codes.distances.build(std::span(lengths).first(32), false);
}

void dynamic_codes(BitReader& reader, Codes& codes) {
  static constexpr std::array<std::uint8_t, 19> kOrder = {16, 17, 18, 0, 8,  7, 9,  6, 10, 5,
                                                          11, 4,  12, 3, 13, 2, 14, 1, 15};
  const std::size_t literals = reader.take(5) + 257;
  const std::size_t distances = reader.take(5) + 1;
  const std::size_t given = reader.take(4) + 4;
  if (literals > 286 || distances > 30) fail();
  std::array<std::uint8_t, 19> code_lengths{};
  for (std::size_t i = 0; i < given; ++i) {
    code_lengths[kOrder[i]] = static_cast<std::uint8_t>(reader.take(3));
  }
  Code lengths_code;
  lengths_code.build(code_lengths, false);
  std::array<std::uint8_t, 286 + 30> lengths{};
  const std::size_t all = literals + distances;
  for (std::size_t i = 0; i < all;) {
    const unsigned symbol = lengths_code.read(reader);
    if (symbol < 16) {
      lengths[i++] = static_cast<std::uint8_t>(symbol);
      continue;
    }
    std::uint8_t value = 0;
    std::size_t repeat = 0;
    if (symbol == 16) {
      if (i == 0) fail();
      value = lengths[i - 1];
      repeat = 3 + reader.take(2);
    } else {
      repeat = symbol == 17 ? 3 + reader.take(3) : 11 + reader.take(7);
    }
    if (repeat > all - i) fail();
    while (repeat-- > 0) lengths[i++] = value;
  }
  if (lengths[kEndOfBlock] == 0) fail();
  codes.literals.build(std::span(lengths).first(literals), true);
  codes.distances.build(std::span(lengths).subspan(literals, distances), true);
}

class Inflater {
 public:
  Inflater(std::span<const std::byte> from, std::span<std::byte> to, bool start_only)
      : reader_(from), to_(to), start_only_(start_only) {}

  // True when the stream ended; false when `to` was full before (start_only).
  bool run() {
    bool last = false;
    while (!last) {
      if (enough()) return false;
      last = reader_.take(1) != 0;
      switch (reader_.take(2)) {
        case 0:
          stored();
          break;
        case 1:
          fixed_codes(codes_);
          coded();
          break;
        case 2:
          dynamic_codes(reader_, codes_);
          coded();
          break;
        default:
          fail();
      }
    }
    return true;
  }

  std::size_t made() const { return made_; }
  bool took_all() const { return reader_.at_end(); }

 private:
  bool enough() const { return start_only_ && made_ == to_.size(); }

  // How many of `wanted` bytes fit; all of them must, unless only the start is wanted.
  std::size_t room_for(std::size_t wanted) const {
    const std::size_t room = to_.size() - made_;
    if (wanted <= room) return wanted;
    if (!start_only_) fail();
    return room;
  }

  void stored() {
    reader_.to_byte();
    const std::uint32_t length = reader_.take(16);
    if ((reader_.take(16) ^ length) != 0xffffu) fail();
    const std::size_t count = room_for(length);
    reader_.copy(to_.subspan(made_, count));
    made_ += count;
  }

  void coded() {
    static constexpr std::array<std::uint16_t, 29> kLengthBase = {
        3,  4,  5,  6,  7,  8,  9,  10, 11,  13,  15,  17,  19,  23, 27,
        31, 35, 43, 51, 59, 67, 83, 99, 115, 131, 163, 195, 227, 258};
    static constexpr std::array<std::uint8_t, 29> kLengthBits = {
        0, 0, 0, 0, 0, 0, 0, 0, 1, 1, 1, 1, 2, 2, 2, 2, 3, 3, 3, 3, 4, 4, 4, 4, 5, 5, 5, 5, 0};
    static constexpr std::array<std::uint16_t, 30> kDistanceBase = {
        1,   2,   3,   4,   5,   7,    9,    13,   17,   25,   33,   49,   65,    97,    129,
        193, 257, 385, 513, 769, 1025, 1537, 2049, 3073, 4097, 6145, 8193, 12289, 16385, 24577};
    while (!enough()) {
      const unsigned symbol = codes_.literals.read(reader_);
      if (symbol < kEndOfBlock) {
        if (room_for(1) == 1) to_[made_++] = static_cast<std::byte>(symbol);
        continue;
      }
      if (symbol == kEndOfBlock) return;
      const std::size_t l = symbol - kEndOfBlock - 1;
      if (l >= kLengthBase.size()) fail();
      const std::size_t length = kLengthBase[l] + reader_.take(kLengthBits[l]);
      const std::size_t d = codes_.distances.read(reader_);
      if (d >= kDistanceBase.size()) fail();
      const int distance_bits = d < 2 ? 0 : static_cast<int>(d / 2) - 1;
      const std::size_t distance = kDistanceBase[d] + reader_.take(distance_bits);
      if (distance > made_) fail();
      const std::size_t count = room_for(length);
      std::byte* const to = to_.data() + made_;
      for (std::size_t i = 0; i < count; ++i) to[i] = (to - distance)[i];  // may overlap, in order
      made_ += count;
    }
  }

  BitReader reader_;
  std::span<std::byte> to_;
  std::size_t made_ = 0;
  bool start_only_;
  Codes codes_;
};

}  // namespace

void inflate(std::span<const std::byte> from, std::span<std::byte> to) {
  Inflater inflater(from, to, false);
  inflater.run();
  if (inflater.made() != to.size() || !inflater.took_all()) fail();
}

std::size_t inflate_start(std::span<const std::byte> from, std::span<std::byte> to) {
  Inflater inflater(from, to, true);
  inflater.run();
  return inflater.made();
}

}  // namespace leadsman::loaders
