// The only file that compiles stb.
#include <cstddef>
#include <cstdlib>
#include <cstring>
#include <limits>
#include <memory>
#include <new>

#include "loaders/stb.h"

#pragma GCC diagnostic push
#pragma GCC diagnostic ignored "-Wpragmas"
#pragma GCC diagnostic ignored "-Wall"
#pragma GCC diagnostic ignored "-Wextra"
#pragma GCC diagnostic ignored "-Wconversion"
#pragma GCC diagnostic ignored "-Wpedantic"
#pragma GCC diagnostic ignored "-Wunused-function"
#pragma GCC diagnostic ignored "-Wunused-parameter"
#pragma GCC diagnostic ignored "-Wsign-compare"

// The entropy decoding of JPEG only. What follows it in JPEG (picture_jpeg_pixels.cc),
// PNG, BMP and PNM are our own, as stb_image 2.27 differs from libjpeg and Pillow there: up to 200
// levels at the right edge of chroma, uninitialised palettes, no checksums, 16-bit grey.
#define STB_IMAGE_STATIC
#define STB_IMAGE_IMPLEMENTATION
#define STBI_ONLY_JPEG
#define STBI_NO_STDIO
#define STBI_NO_LINEAR
#define STBI_NO_HDR
#define STBI_NO_SIMD
#define STBI_MAX_DIMENSIONS (1 << 24)
// A damaged file may trip these; they guard no memory access (the table sizes are checked before).
#define STBI_ASSERT(condition) static_cast<void>(0)
// Zeroed, so that parts of a picture that damaged data leave out are the same on every run.
#define STBI_MALLOC(bytes) std::calloc(1, bytes)
#define STBI_REALLOC(block, bytes) std::realloc(block, bytes)
#define STBI_FREE(block) std::free(block)
#include <stb/stb_image.h>

namespace {

// stb_image_write does not look at what these return.
void* reallocate_or_throw(void* block, std::size_t bytes) {
  void* grown = std::realloc(block, bytes);
  if (grown == nullptr) throw std::bad_alloc();
  return grown;
}

}  // namespace

#define STB_IMAGE_WRITE_STATIC
#define STB_IMAGE_WRITE_IMPLEMENTATION
#define STBI_WRITE_NO_STDIO
#define STBIW_ASSERT(condition) static_cast<void>(0)
#define STBIW_MALLOC(bytes) reallocate_or_throw(nullptr, bytes)
#define STBIW_REALLOC(block, bytes) reallocate_or_throw(block, bytes)
#define STBIW_FREE(block) std::free(block)
#include <stb/stb_image_write.h>
#pragma GCC diagnostic pop

namespace leadsman::loaders {
namespace {

struct FreeBlock {
  void operator()(unsigned char* block) const { std::free(block); }
};
using Block = std::unique_ptr<unsigned char, FreeBlock>;

// stb's state, which owns the planes.
struct JpegDecoder {
  stbi__jpeg jpeg;
  stbi__context context;

  JpegDecoder() {
    std::memset(&jpeg, 0, sizeof(jpeg));
    std::memset(&context, 0, sizeof(context));
  }
  ~JpegDecoder() { stbi__cleanup_jpeg(&jpeg); }
  JpegDecoder(const JpegDecoder&) = delete;
  JpegDecoder& operator=(const JpegDecoder&) = delete;
};

}  // namespace

std::string stb_decode_jpeg(std::span<const std::byte> bytes, InverseTransform transform,
                            JpegPlanes& result) {
  if (bytes.size() > static_cast<std::size_t>(std::numeric_limits<int>::max())) {
    return "is above 2 GiB";
  }
  const auto decoder = std::make_shared<JpegDecoder>();
  stbi__start_mem(&decoder->context, reinterpret_cast<const stbi_uc*>(bytes.data()),
                  static_cast<int>(bytes.size()));
  decoder->context.img_n = 0;
  decoder->jpeg.s = &decoder->context;
  stbi__setup_jpeg(&decoder->jpeg);
  decoder->jpeg.idct_block_kernel = transform;
  if (stbi__decode_jpeg_image(&decoder->jpeg) == 0) {
    const char* reason = stbi_failure_reason();
    if (reason == nullptr) return "damaged JPEG data";
    if (std::strcmp(reason, "outofmem") == 0) throw std::bad_alloc();
    return std::string("damaged JPEG data (") + reason + ")";
  }
  result.planes.clear();
  for (int i = 0; i < decoder->context.img_n; ++i) {
    const auto& component = decoder->jpeg.img_comp[i];
    result.planes.push_back({component.data, component.w2, component.x, component.y,
                             decoder->jpeg.img_h_max / component.h,
                             decoder->jpeg.img_v_max / component.v});
  }
  result.owner = decoder;
  return "";
}

std::vector<std::uint8_t> stb_encode_png(const Picture& picture) {
  int bytes = 0;
  const int width = static_cast<int>(picture.width);
  const Block file(stbi_write_png_to_mem(picture.rgb.data(), width * 3, width,
                                         static_cast<int>(picture.height), 3, &bytes));
  if (file == nullptr) throw std::bad_alloc();
  return {file.get(), file.get() + bytes};
}

}  // namespace leadsman::loaders
