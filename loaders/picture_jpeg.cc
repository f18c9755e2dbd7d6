// JPEG (ITU-T T.81): every marker segment is checked here before stb decodes the file.
//
// The checks are those that libjpeg makes and stb_image 2.27 does not (sizes of Huffman tables,
// tables used before they are defined, components that no scan brings, a file without its end), so
// that nothing is read out of bounds and a damaged file is reported. Both must see the same
// markers: what is skipped here is what stb skips.
#include <algorithm>
#include <array>
#include <cstring>
#include <optional>

#include "loaders/picture_formats.h"
#include "loaders/picture_jpeg_pixels.h"
#include "loaders/picture_jpeg_tables.h"
#include "loaders/stb.h"

namespace leadsman::loaders {
namespace {

// Real files have about 10. Each costs a pass over the picture, however few bytes it has.
constexpr int kMostScans = 100;

constexpr std::uint32_t kStartOfImage = 0xd8;
constexpr std::uint32_t kEndOfImage = 0xd9;
constexpr std::uint32_t kStartOfScan = 0xda;

bool is_restart(std::uint32_t marker) {
  return marker >= 0xd0 && marker <= 0xd7;
}
std::int64_t divide_up(std::int64_t a, std::int64_t b) {
  return (a + b - 1) / b;
}

class JpegCheck {
 public:
  explicit JpegCheck(const PictureSource& source) : source_(source) {}

  void run();

  std::int64_t width() const { return width_; }
  std::int64_t height() const { return height_; }
  std::span<const std::byte> exif() const { return exif_; }
  JpegColours colours() const;
  /// Standard Huffman tables that the file uses without defining them: DHT segments, and where they
  /// belong.
  const std::vector<std::byte>& missing_tables() const { return missing_tables_; }
  std::size_t first_scan() const { return first_scan_; }

 private:
  struct Component {
    std::uint32_t id = 0;
    std::int64_t across = 0;  // sampling factors
    std::int64_t down = 0;
    std::uint32_t quantization = 0;
    bool sent = false;  // a scan has brought it (progressive: its first DC scan)
  };
  struct Segment {
    std::size_t start = 0;  // after the length
    std::size_t end = 0;
  };

  struct ScanSize {
    std::int64_t units = 0;  // what a restart interval counts: blocks of a lone component, or MCUs
    std::int64_t blocks = 0;
  };

  [[noreturn]] void fail_short() const {
    source_.fail("ends before its end-of-image marker: it is cut short");
  }
  void need(bool condition, const char* message) const {
    if (!condition) source_.fail(message);
  }
  std::uint32_t next_marker();
  Segment read_segment();
  void read_quantization(Segment segment);
  void read_huffman(Segment segment);
  void add_standard_tables();
  void read_frame(std::uint32_t marker, Segment segment);
  void read_scan(Segment segment);
  void check_tables(const Component& component, std::uint32_t tables, bool needs_dc,
                    bool needs_ac) const;
  ScanSize scan_size(std::span<const std::size_t> members) const;
  void skip_entropy_data(const ScanSize& size, std::int64_t bits_of_block);

  const PictureSource& source_;
  std::size_t position_ = 2;
  std::int64_t width_ = 0;
  std::int64_t height_ = 0;
  std::vector<Component> components_;
  std::int64_t across_max_ = 1;
  std::int64_t down_max_ = 1;
  bool progressive_ = false;
  std::array<bool, 4> quantization_{};
  std::array<bool, 4> dc_tables_{};
  std::array<bool, 4> ac_tables_{};
  std::int64_t restart_interval_ = 0;
  int scans_ = 0;
  std::size_t first_scan_ = 0;
  std::vector<std::byte> missing_tables_;
  bool jfif_ = false;
  std::optional<std::uint8_t> adobe_transform_;
  bool exif_seen_ = false;
  std::span<const std::byte> exif_;
};

// Leaves position_ after the marker.
std::uint32_t JpegCheck::next_marker() {
  while (true) {
    while (position_ < source_.size() && source_.at(position_) != 0xff) ++position_;
    while (position_ < source_.size() && source_.at(position_) == 0xff) ++position_;
    if (position_ >= source_.size()) fail_short();
    const std::uint32_t marker = source_.at(position_++);
    if (marker != 0) return marker;
  }
}

JpegCheck::Segment JpegCheck::read_segment() {
  if (source_.size() - position_ < 2) fail_short();
  const std::size_t length = source_.be16(position_);
  need(length >= 2, "has a JPEG segment of impossible length");
  if (length > source_.size() - position_) fail_short();
  const Segment segment{position_ + 2, position_ + length};
  position_ = segment.end;
  return segment;
}

void JpegCheck::read_quantization(Segment segment) {
  std::size_t at = segment.start;
  while (at < segment.end) {
    const std::uint32_t head = source_.at(at);
    const std::size_t bytes = (head >> 4) == 0 ? 65 : 129;
    need((head >> 4) <= 1 && (head & 15) <= 3 && bytes <= segment.end - at,
         "has a damaged quantization table");
    quantization_[head & 15] = true;
    at += bytes;
  }
}

void JpegCheck::read_huffman(Segment segment) {
  std::size_t at = segment.start;
  while (at < segment.end) {
    need(segment.end - at >= 17, "has a damaged Huffman table");
    const std::uint32_t head = source_.at(at);
    std::size_t symbols = 0;
    for (std::size_t i = 1; i <= 16; ++i) symbols += source_.at(at + i);
    at += 17;
    need((head >> 4) <= 1 && (head & 15) <= 3 && symbols <= 256 && symbols <= segment.end - at,
         "has a damaged Huffman table");
    ((head >> 4) == 0 ? dc_tables_ : ac_tables_)[head & 15] = true;
    at += symbols;
  }
}

void JpegCheck::add_standard_tables() {
  const auto add = [&](bool& defined, std::span<const std::uint8_t> table) {
    if (defined) return;
    defined = true;
    const std::size_t length = table.size() + 2;
    for (const std::size_t value :
         {std::size_t{0xff}, std::size_t{0xc4}, length >> 8, length & 255}) {
      missing_tables_.push_back(static_cast<std::byte>(value));
    }
    for (const std::uint8_t value : table) missing_tables_.push_back(std::byte{value});
  };
  add(dc_tables_[0], kDcTable0);
  add(dc_tables_[1], kDcTable1);
  add(ac_tables_[0], kAcTable0);
  add(ac_tables_[1], kAcTable1);
}

void JpegCheck::read_frame(std::uint32_t marker, Segment segment) {
  need(marker <= 0xc2,
       "is JPEG with lossless, hierarchical or arithmetic coding, which is not read");
  need(components_.empty(), "has two JPEG frames");
  need(segment.end - segment.start >= 6, "has a damaged JPEG frame header");
  const std::uint32_t bits = source_.at(segment.start);
  const std::size_t count = source_.at(segment.start + 5);
  need(bits == 8, "is JPEG of more or fewer than 8 bits, which is not read");
  need(segment.end - segment.start == 6 + 3 * count, "has a damaged JPEG frame header");
  need(count == 1 || count == 3 || count == 4, "has not 1, 3 or 4 JPEG components");
  progressive_ = marker == 0xc2;
  height_ = source_.be16(segment.start + 1);
  width_ = source_.be16(segment.start + 3);
  check_picture_size(source_, width_, height_);
  for (std::size_t i = 0; i < count; ++i) {
    const std::size_t at = segment.start + 6 + 3 * i;
    const Component component{source_.at(at), source_.at(at + 1) >> 4, source_.at(at + 1) & 15,
                              source_.at(at + 2), false};
    for (const Component& other : components_) {
      need(other.id != component.id, "has two JPEG components of one name");
    }
    need(component.across >= 1 && component.across <= 4 && component.down >= 1 &&
             component.down <= 4 && component.quantization <= 3,
         "has a damaged JPEG frame header");
    across_max_ = std::max(across_max_, component.across);
    down_max_ = std::max(down_max_, component.down);
    components_.push_back(component);
  }
  for (const Component& component : components_) {
    need(across_max_ % component.across == 0 && down_max_ % component.down == 0,
         "has JPEG chroma sampled by an uneven factor, which is not read");
  }
}

void JpegCheck::check_tables(const Component& component, std::uint32_t tables, bool needs_dc,
                             bool needs_ac) const {
  need((tables >> 4) <= 3 && (tables & 15) <= 3, "has a damaged JPEG scan header");
  need(quantization_[component.quantization] && (!needs_dc || dc_tables_[tables >> 4]) &&
           (!needs_ac || ac_tables_[tables & 15]),
       "uses a JPEG table that it does not define");
}

void JpegCheck::read_scan(Segment segment) {
  need(!components_.empty(), "has a JPEG scan before its frame header");
  need(++scans_ <= kMostScans, "has more than 100 JPEG scans");
  if (scans_ == 1) {
    first_scan_ = segment.start - 4;
    if (!progressive_) add_standard_tables();
  }
  const std::size_t bytes = segment.end - segment.start;
  const std::size_t count = bytes == 0 ? 0 : source_.at(segment.start);
  need(count >= 1 && count <= components_.size() && bytes == 4 + 2 * count,
       "has a damaged JPEG scan header");
  const std::size_t tail = segment.start + 1 + 2 * count;
  const std::uint32_t first = source_.at(tail);  // of the spectral selection
  const std::uint32_t last = source_.at(tail + 1);
  const std::uint32_t high = source_.at(tail + 2) >> 4;  // of the successive approximation
  const std::uint32_t low = source_.at(tail + 2) & 15;
  const bool is_dc = first == 0;
  const bool refines = high != 0;
  if (progressive_) {
    need((is_dc ? last == 0 : count == 1 && last >= first && last <= 63) && low <= 13 &&
             (!refines || high == low + 1),
         "has a damaged JPEG scan header");
  } else {
    need(is_dc && high == 0 && low == 0, "has a damaged JPEG scan header");
  }

  std::vector<std::size_t> members;
  for (std::size_t i = 0; i < count; ++i) {
    const std::uint32_t id = source_.at(segment.start + 1 + 2 * i);
    const std::uint32_t tables = source_.at(segment.start + 2 + 2 * i);
    std::size_t which = 0;
    while (which < components_.size() && components_[which].id != id) ++which;
    need(which < components_.size() &&
             std::find(members.begin(), members.end(), which) == members.end(),
         "has a damaged JPEG scan header");
    members.push_back(which);
    Component& component = components_[which];
    check_tables(component, tables, is_dc && !refines, !progressive_ || !is_dc);
    if (is_dc && !refines) component.sent = true;
    need(component.sent, "has JPEG scans in an impossible order");
  }
  // A Huffman code has a bit or more: one for DC, one to end the block.
  skip_entropy_data(scan_size(members), !progressive_ ? 2 : is_dc ? 1 : 0);
}

JpegCheck::ScanSize JpegCheck::scan_size(std::span<const std::size_t> members) const {
  if (members.size() == 1) {
    const Component& component = components_[members[0]];
    const std::int64_t blocks = divide_up(divide_up(width_ * component.across, across_max_), 8) *
                                divide_up(divide_up(height_ * component.down, down_max_), 8);
    return {blocks, blocks};
  }
  const std::int64_t units = divide_up(width_, 8 * across_max_) * divide_up(height_, 8 * down_max_);
  std::int64_t blocks = 0;
  for (const std::size_t which : members) {
    blocks += units * components_[which].across * components_[which].down;
  }
  return {units, blocks};
}

// Leaves position_ at the marker that ends the data.
void JpegCheck::skip_entropy_data(const ScanSize& size, std::int64_t bits_of_block) {
  const std::size_t begin = position_;
  std::int64_t restarts = 0;
  while (true) {
    const void* found = position_ < source_.size() ? std::memchr(source_.bytes.data() + position_,
                                                                 0xff, source_.size() - position_)
                                                   : nullptr;
    if (found == nullptr) fail_short();
    const std::size_t start =
        static_cast<std::size_t>(static_cast<const std::byte*>(found) - source_.bytes.data());
    position_ = start;
    while (position_ < source_.size() && source_.at(position_) == 0xff) ++position_;
    if (position_ >= source_.size()) fail_short();
    const std::uint32_t marker = source_.at(position_++);
    if (marker == 0) continue;
    if (!is_restart(marker)) {
      position_ = start;
      break;
    }
    need(marker == 0xd0 + static_cast<std::uint32_t>(restarts & 7),
         "has JPEG restart markers out of order: part of its data is missing");
    ++restarts;
  }
  need(static_cast<std::int64_t>(position_ - begin) >= size.blocks * bits_of_block / 8,
       "lacks a part of its JPEG data");
  const bool even = restart_interval_ > 0 && size.units % restart_interval_ == 0;
  const std::int64_t expected =
      restart_interval_ > 0 ? divide_up(size.units, restart_interval_) - 1 : 0;
  // Some writers put a last one after the last unit.
  need(restarts == expected || (even && restarts == expected + 1),
       "has too few or too many JPEG restart markers: part of its data is missing");
}

void JpegCheck::run() {
  while (true) {
    const std::uint32_t marker = next_marker();
    if (marker == kEndOfImage) break;
    need(marker != kStartOfImage && !is_restart(marker) && marker != 0x01,
         "has a JPEG marker out of place");
    const Segment segment = read_segment();
    const bool frame = marker >= 0xc0 && marker <= 0xcf && marker != 0xc4 && marker != 0xc8;
    if (marker == 0xdb) {
      read_quantization(segment);
    } else if (marker == 0xc4) {
      read_huffman(segment);
    } else if (marker == 0xdd) {
      need(segment.end - segment.start == 2, "has a damaged JPEG restart interval");
      restart_interval_ = source_.be16(segment.start);
    } else if (frame) {
      read_frame(marker, segment);
    } else if (marker == kStartOfScan) {
      read_scan(segment);
    } else if (marker == 0xe0 && segment.end - segment.start >= 14 &&
               source_.starts_with(std::string_view("JFIF\0", 5), segment.start)) {
      jfif_ = true;
    } else if (marker == 0xee && segment.end - segment.start >= 12 &&
               source_.starts_with("Adobe", segment.start)) {
      adobe_transform_ = source_.at(segment.start + 11);
    } else if (marker == 0xe1 && !exif_seen_ && segment.end - segment.start >= 6 &&
               source_.starts_with(std::string_view("Exif\0", 5), segment.start)) {
      exif_seen_ = true;
      exif_ = source_.bytes.subspan(segment.start + 6, segment.end - segment.start - 6);
    }
  }
  need(scans_ > 0, "has no JPEG scan");
  for (const Component& component : components_) {
    need(component.sent, "lacks the data of a JPEG component");
  }
}

// libjpeg's rules (jdapimin.c, default_decompress_parms): a JFIF segment means YCbCr, else an Adobe
// segment (Adobe Technical Note 5116) decides, else the names of the components.
JpegColours JpegCheck::colours() const {
  if (components_.size() == 1) return JpegColours::kGrey;
  if (components_.size() == 4) {
    return adobe_transform_.value_or(0) == 0 ? JpegColours::kCmyk : JpegColours::kYcck;
  }
  if (jfif_) return JpegColours::kYcc;
  if (adobe_transform_) return *adobe_transform_ == 0 ? JpegColours::kRgb : JpegColours::kYcc;
  const bool named_rgb =
      components_[0].id == 'R' && components_[1].id == 'G' && components_[2].id == 'B';
  return named_rgb ? JpegColours::kRgb : JpegColours::kYcc;
}

}  // namespace

DecodedPicture decode_jpeg(const PictureSource& source) {
  JpegCheck check(source);
  check.run();
  JpegPlanes planes;
  std::span<const std::byte> bytes = source.bytes;
  std::vector<std::byte> completed;
  if (!check.missing_tables().empty()) {
    completed.assign(bytes.begin(), bytes.end());
    completed.insert(completed.begin() + static_cast<std::ptrdiff_t>(check.first_scan()),
                     check.missing_tables().begin(), check.missing_tables().end());
    bytes = completed;
  }
  const std::string problem = stb_decode_jpeg(bytes, jpeg_inverse_transform, planes);
  if (!problem.empty()) source.fail(problem);
  DecodedPicture decoded{make_picture(source, check.width(), check.height()), check.exif()};
  jpeg_planes_to_rgb(planes, check.colours(), decoded.picture);
  return decoded;
}

}  // namespace leadsman::loaders
