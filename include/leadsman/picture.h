// Pictures from JPEG, PNG, BMP and PNM files, as 8-bit RGB.
//
// Every kind of file becomes RGB as Pillow 9.4 does it with convert("RGB"), byte for byte, since
// that is what most classifiers were trained behind (for JPEG that is libjpeg-turbo with its
// default, accurate settings):
//   - grey is replicated; an alpha channel and PNG transparency are dropped, not composited;
//   - 1-, 2- and 4-bit grey is spread over 0..255; palette entries that the file leaves out are
//     the grey of their own index;
//   - 16-bit colour and 16-bit grey with alpha keep the high byte, but 16-bit grey (PNG, and PGM
//     of more than 8 bits, spread over 0..65535) is *clipped* at 255: nearly white. It looks wrong
//     and is what a model behind Pillow would have seen;
//   - CMYK and YCCK JPEG is taken as inverted, as Adobe's programs write it.
// Colour profiles and gamma are not applied.
//
// Not read: JPEG with arithmetic coding, lossless or of other than 8 bits; run-length BMP; all
// other kinds of file. A file that is cut short, or whose checksums, tables or restart markers do
// not fit, is an error, also where Pillow would show what is left of it. What cannot be seen is
// damage inside JPEG data that leaves the markers whole: as in libjpeg, the rest of the picture is
// then wrong.
#pragma once

#include <cstddef>
#include <cstdint>
#include <filesystem>
#include <span>
#include <string_view>
#include <vector>

namespace leadsman {

/// Rows top to bottom, pixels left to right, bytes R, G, B: rgb.size() == width * height * 3.
struct Picture {
  std::int64_t width = 0;
  std::int64_t height = 0;
  std::vector<std::uint8_t> rgb;
};

/// Height before width, as everywhere in this library.
struct PictureSize {
  std::int64_t height = 0;
  std::int64_t width = 0;

  bool operator==(const PictureSize&) const = default;
};

enum class Orientation {
  kAsStored,
  /// Turned and mirrored as EXIF tag 0x0112 says (JPEG APP1, PNG eXIf), like Pillow's
  /// ImageOps.exif_transpose. No tag, or EXIF that does not parse: as stored.
  kExif,
};

/// Checked from the header, before anything is decoded. Whatever the limits, no side is above 2^24
/// and the RGB bytes are below 2^31.
struct PictureLimits {
  std::int64_t max_side = 32768;
  /// width * height * 3. While decoding, up to four times as much is needed beside it (progressive
  /// JPEG, 16-bit PNG).
  std::int64_t max_bytes = std::int64_t{512} << 20;
  std::int64_t max_file_bytes = std::int64_t{256} << 20;
};

/// Throws Error(kInput) naming the file when it is missing, a folder, not JPEG, PNG, BMP or PNM,
/// broken or above a limit; Error(kMemory) naming it when memory runs out. Safe to call from
/// several threads at once.
Picture read_picture(const std::filesystem::path& path,
                     Orientation orientation = Orientation::kAsStored,
                     const PictureLimits& limits = {});

/// The same from memory; `name` stands for the file in messages.
Picture decode_picture(std::span<const std::byte> bytes, std::string_view name,
                       Orientation orientation = Orientation::kAsStored,
                       const PictureLimits& limits = {});

/// Whether the file begins as JPEG does, the one kind whose decoders may differ. False when it
/// cannot be read.
bool is_jpeg(const std::filesystem::path& path);

/// Writes an 8-bit RGB PNG; `path` holds either its old contents or the whole picture at any time.
/// Throws Error(kInput) naming the path when it cannot be written, Error(kUsage) when the picture
/// is empty, its bytes do not fit its sizes or it is above 2^30 bytes.
void write_png(const std::filesystem::path& path, const Picture& picture);

}  // namespace leadsman
