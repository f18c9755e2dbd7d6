// JPEG files that are broken or hostile, one for each check of picture_jpeg.cc.
#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "leadsman/picture.h"
#include "tests/loaders/picture_builder.h"
#include "tests/loaders/picture_cases.h"

namespace leadsman {
namespace {

using namespace testing::pictures;  // NOLINT: the builder's words

/// Without the segments of one kind of marker.
std::string without_segments(const std::string& jpeg, int marker) {
  std::string out = jpeg.substr(0, 2);
  std::size_t at = 2;
  while (true) {
    const int kind = static_cast<unsigned char>(jpeg.at(at + 1));
    const std::size_t length = static_cast<std::size_t>(static_cast<unsigned char>(jpeg.at(at + 2)))
                                   << 8 |
                               static_cast<unsigned char>(jpeg.at(at + 3));
    if (kind == 0xda) return out + jpeg.substr(at);
    if (kind != marker) out += jpeg.substr(at, length + 2);
    at += length + 2;
  }
}

TEST(BrokenPicture, Jpeg) {
  const std::string grey = stored("jpeg_grey.jpg");
  const std::string colour = stored("jpeg_444.jpg");
  const std::string restart = stored("jpeg_restart_444.jpg");
  const std::string progressive = stored("jpeg_progressive_444.jpg");
  const std::string scans = stored("jpeg_scans_420.jpg");
  const std::string frame = bytes_of({0xff, 0xc0, 0, 11, 8, 0, 21, 0, 27, 1, 1, 0x11, 0});
  const std::string frame3 = bytes_of({0xff, 0xc0, 0, 17, 8, 0, 21, 0, 27, 3});
  const auto sized = [&](int high, int wide) {
    return patched(grey, frame,
                   bytes_of({0xff, 0xc0, 0, 11, 8, high >> 8, high & 255, wide >> 8, wide & 255, 1,
                             1, 0x11, 0}));
  };
  const auto with_frame = [&](std::initializer_list<int> values) {
    return patched(grey, frame, bytes_of(values));
  };
  // Sixteen counts of 255: 4080 symbols, far past the tables of stb_image 2.27.
  const std::string fat_table =
      bytes_of({0xff, 0xc4, 0x10, 0x13, 0}) + std::string(16, '\xff') + std::string(4096, 'a');
  // A scan with AC of a component whose DC has not come.
  const std::string early_ac = bytes_of({0xff, 0xc4, 0, 20, 0x10, 1}) + std::string(16, '\0') +
                               bytes_of({0xff, 0xda, 0, 8, 1, 1, 0, 1, 5, 0});
  const std::string first_scan = bytes_of({0xff, 0xda, 0, 12, 3});
  const std::size_t second_scan = scans.find(bytes_of({0xff, 0xda}), scans.find("\xff\xda") + 2);

  expect_all_broken({
      {"start alone", "\xff\xd8", "cut short"},
      {"start and end", "\xff\xd8\xff\xd9", "no JPEG scan"},
      {"no frame", grey.substr(0, 2) + grey.substr(grey.find("\xff\xda")), "before its frame"},
      {"height 0", sized(0, 27), "no pixels"},
      {"width 0", sized(21, 0), "no pixels"},
      {"65535 x 65535", sized(65535, 65535), "limit of 32768 a side"},
      {"32000 x 32000", sized(32000, 32000), "limit of 536870912 bytes"},
      {"a large picture in 600 bytes", sized(5000, 30000), "lacks a part"},
      {"12 bits", with_frame({0xff, 0xc1, 0, 11, 12, 0, 21, 0, 27, 1, 1, 0x11, 0}), "8 bits"},
      {"2 components", with_frame({0xff, 0xc0, 0, 14, 8, 0, 21, 0, 27, 2, 1, 0x11, 0, 2, 0x11, 0}),
       "components"},
      {"sampled 0 times", with_frame({0xff, 0xc0, 0, 11, 8, 0, 21, 0, 27, 1, 1, 0x01, 0}),
       "frame header"},
      {"sampled 5 times", with_frame({0xff, 0xc0, 0, 11, 8, 0, 21, 0, 27, 1, 1, 0x51, 0}),
       "frame header"},
      {"quantization table 4", with_frame({0xff, 0xc0, 0, 11, 8, 0, 21, 0, 27, 1, 1, 0x11, 4}),
       "frame header"},
      {"quantization table not there",
       with_frame({0xff, 0xc0, 0, 11, 8, 0, 21, 0, 27, 1, 1, 0x11, 3}), "does not define"},
      {"lossless", with_frame({0xff, 0xc3, 0, 11, 8, 0, 21, 0, 27, 1, 1, 0x11, 0}), "lossless"},
      {"arithmetic", with_frame({0xff, 0xc9, 0, 11, 8, 0, 21, 0, 27, 1, 1, 0x11, 0}), "arithmetic"},
      {"frame of another length", with_frame({0xff, 0xc0, 0, 11, 8, 0, 21, 0, 27, 3, 1, 0x11, 0}),
       "frame header"},
      {"two frames", patched(grey, frame, frame + frame), "two JPEG frames"},
      {"one name twice",
       patched(colour, frame3 + bytes_of({1, 0x11, 0, 2}), frame3 + bytes_of({1, 0x11, 0, 1})),
       "one name"},
      {"chroma sampled 3 to 2",
       patched(colour, frame3 + bytes_of({1, 0x11, 0, 2, 0x11}),
               frame3 + bytes_of({1, 0x31, 0, 2, 0x21})),
       "uneven"},
      {"no Huffman tables, progressive", without_segments(progressive, 0xc4), "does not define"},
      {"Huffman table 2 not there",
       patched(grey, bytes_of({0xff, 0xda, 0, 8, 1, 1, 0}),
               bytes_of({0xff, 0xda, 0, 8, 1, 1, 0x22})),
       "does not define"},
      {"no quantization tables", without_segments(grey, 0xdb), "does not define"},
      {"fat Huffman table", patched(grey, frame, fat_table + frame), "Huffman"},
      {"Huffman table 4",
       patched(grey, frame, bytes_of({0xff, 0xc4, 0, 19, 4}) + std::string(16, '\0') + frame),
       "Huffman"},
      {"Huffman table past its segment",
       patched(grey, frame, bytes_of({0xff, 0xc4, 0, 19, 0, 200}) + std::string(15, '\0') + frame),
       "Huffman"},
      {"Huffman code that is too full",
       patched(grey, frame, bytes_of({0xff, 0xc4, 0, 24, 1, 5}) + std::string(20, '\0') + frame),
       "damaged JPEG data"},
      {"quantization table cut",
       patched(grey, frame, bytes_of({0xff, 0xdb, 0, 10, 0}) + std::string(7, '\1') + frame),
       "quantization"},
      {"segment of length 1", patched(grey, frame, bytes_of({0xff, 0xfe, 0, 1}) + frame),
       "impossible length"},
      {"restart interval of 3 bytes",
       patched(grey, frame, bytes_of({0xff, 0xdd, 0, 5, 0, 1, 1}) + frame), "restart interval"},
      {"restart interval without markers",
       patched(grey, frame, bytes_of({0xff, 0xdd, 0, 4, 0, 2}) + frame), "too few or too many"},
      {"restart markers without interval", without_segments(restart, 0xdd), "too few or too many"},
      {"a restart marker gone", patched(restart, "\xff\xd0", ""), "out of order"},
      {"the last restart marker gone", patched(restart, "\xff\xd1", ""), "too few or too many"},
      {"scan of an unknown component",
       patched(grey, bytes_of({0xff, 0xda, 0, 8, 1, 1}), bytes_of({0xff, 0xda, 0, 8, 1, 9})),
       "scan header"},
      {"scan of 4 components", patched(colour, first_scan, bytes_of({0xff, 0xda, 0, 12, 4})),
       "scan header"},
      {"scan of one component twice",
       patched(colour, first_scan + bytes_of({1, 0, 2}), first_scan + bytes_of({1, 0, 1})),
       "scan header"},
      {"Huffman table 9 wanted",
       patched(grey, bytes_of({0xff, 0xda, 0, 8, 1, 1, 0}),
               bytes_of({0xff, 0xda, 0, 8, 1, 1, 0x99})),
       "scan header"},
      {"a component is never sent", scans.substr(0, second_scan) + "\xff\xd9", "lacks the data"},
      {"AC before DC", patched(progressive, first_scan, early_ac + first_scan), "impossible order"},
      {"101 scans",
       [&] {
         std::string many = grey.substr(0, grey.size() - 2);
         const std::string scan = many.substr(many.find("\xff\xda"));
         for (int i = 0; i < 100; ++i) many += scan;
         return many + "\xff\xd9";
       }(),
       "more than 100"},
      {"start of image inside", patched(grey, frame, "\xff\xd8" + frame), "out of place"},
      {"bits that no code has",
       [&] {
         const std::size_t data = grey.find("\xff\xda") + 10;
         std::string ones = grey.substr(0, data);
         for (int i = 0; i < 200; ++i) ones += std::string("\xff\0", 2);
         return ones + "\xff\xd9";
       }(),
       "bad huffman code"},
  });
  EXPECT_EQ(error_of(to_bytes(sized(21, 27))), "");
}

}  // namespace
}  // namespace leadsman
