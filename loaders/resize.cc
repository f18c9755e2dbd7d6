// The algorithm is Pillow's (src/libImaging/Resample.c of 9.4): for each output pixel a filter
// whose support grows with the reduction, weights in 22-bit fixed point, columns before rows, bytes
// in between. Its order of operations is kept, since the results are to be equal bit for bit.
#include "loaders/resize.h"

#include <algorithm>
#include <cmath>
#include <string>

#include "leadsman/error.h"

namespace leadsman::loaders {
namespace {

constexpr int kFractionBits = 32 - 8 - 2;
constexpr std::int32_t kHalf = 1 << (kFractionBits - 1);
constexpr std::int64_t kMostBytes = std::int64_t{1} << 30;

double triangle(double x) {
  x = std::abs(x);
  return x < 1.0 ? 1.0 - x : 0.0;
}

double cubic(double x) {
  constexpr double a = -0.5;
  x = std::abs(x);
  if (x < 1.0) return ((a + 2.0) * x - (a + 3.0)) * x * x + 1;
  if (x < 2.0) return (((x - 5) * x + 8) * x - 4) * a;
  return 0.0;
}

std::uint8_t rounded_byte(std::int32_t sum) {
  return static_cast<std::uint8_t>(std::clamp(sum >> kFractionBits, 0, 255));
}

/// For output positions from .. from + count - 1 along one axis: which inputs, with what weights.
class Taps {
 public:
  Taps(std::int64_t in, std::int64_t out, std::int64_t from, std::int64_t count,
       Interpolation interpolation);

  std::int64_t first(std::int64_t i) const { return first_[static_cast<std::size_t>(i)]; }
  std::int64_t count(std::int64_t i) const { return count_[static_cast<std::size_t>(i)]; }
  const std::int32_t* weights(std::int64_t i) const { return weights_.data() + i * most_; }
  /// Inputs that any of the positions uses: [begin, end). Both bounds grow with the position.
  std::int64_t begin() const { return first_.front(); }
  std::int64_t end() const { return first_.back() + count_.back(); }

 private:
  std::int64_t most_ = 0;
  std::vector<std::int64_t> first_;
  std::vector<std::int64_t> count_;
  std::vector<std::int32_t> weights_;
};

Taps::Taps(std::int64_t in, std::int64_t out, std::int64_t from, std::int64_t count,
           Interpolation interpolation) {
  const bool is_cubic = interpolation == Interpolation::kBicubic;
  const double scale = static_cast<double>(in) / static_cast<double>(out);
  const double filter_scale = std::max(scale, 1.0);
  const double support = (is_cubic ? 2.0 : 1.0) * filter_scale;
  const double inverse = 1.0 / filter_scale;
  most_ = static_cast<std::int64_t>(std::ceil(support)) * 2 + 1;
  first_.resize(static_cast<std::size_t>(count));
  count_.resize(static_cast<std::size_t>(count));
  weights_.resize(static_cast<std::size_t>(count * most_));
  std::vector<double> exact(static_cast<std::size_t>(most_));
  for (std::int64_t i = 0; i < count; ++i) {
    const double center = (static_cast<double>(from + i) + 0.5) * scale;
    const auto low = std::max<std::int64_t>(static_cast<std::int64_t>(center - support + 0.5), 0);
    const auto high = std::min<std::int64_t>(static_cast<std::int64_t>(center + support + 0.5), in);
    double sum = 0.0;
    for (std::int64_t x = low; x < high; ++x) {
      const double at = (static_cast<double>(x) - center + 0.5) * inverse;
      const double weight = is_cubic ? cubic(at) : triangle(at);
      exact[static_cast<std::size_t>(x - low)] = weight;
      sum += weight;
    }
    first_[static_cast<std::size_t>(i)] = low;
    count_[static_cast<std::size_t>(i)] = high - low;
    std::int32_t* weights = weights_.data() + i * most_;
    for (std::int64_t k = 0; k < high - low; ++k) {
      double weight = exact[static_cast<std::size_t>(k)];
      if (sum != 0.0) weight /= sum;
      weights[k] =
          static_cast<std::int32_t>((weight < 0 ? -0.5 : 0.5) + weight * (1 << kFractionBits));
    }
  }
}

void check_bytes(const Picture& picture, const PictureSize& size, std::int64_t width,
                 std::int64_t height) {
  if (width > kMostBytes / 3 / height) {
    throw_input("resizing " + std::to_string(picture.height) + "x" + std::to_string(picture.width) +
                " to " + std::to_string(size.height) + "x" + std::to_string(size.width) +
                " needs more than 1 GiB");
  }
}

Picture make(std::int64_t width, std::int64_t height) {
  return {width, height, std::vector<std::uint8_t>(static_cast<std::size_t>(width * height * 3))};
}

/// Rows row_begin .. row_end - 1 of `picture`, each `taps` wide.
Picture resize_columns(const Picture& picture, const Taps& taps, std::int64_t width,
                       std::int64_t row_begin, std::int64_t row_end) {
  Picture resized = make(width, row_end - row_begin);
  std::uint8_t* to = resized.rgb.data();
  for (std::int64_t y = row_begin; y < row_end; ++y) {
    const std::uint8_t* row = picture.rgb.data() + y * picture.width * 3;
    for (std::int64_t x = 0; x < width; ++x, to += 3) {
      const std::uint8_t* from = row + taps.first(x) * 3;
      const std::int32_t* weights = taps.weights(x);
      const std::int64_t count = taps.count(x);
      std::int32_t red = kHalf;
      std::int32_t green = kHalf;
      std::int32_t blue = kHalf;
      for (std::int64_t k = 0; k < count; ++k, from += 3) {
        const std::int32_t weight = weights[k];
        red += from[0] * weight;
        green += from[1] * weight;
        blue += from[2] * weight;
      }
      to[0] = rounded_byte(red);
      to[1] = rounded_byte(green);
      to[2] = rounded_byte(blue);
    }
  }
  return resized;
}

/// `rows` holds the input rows from `row_begin` on.
Picture resize_rows(const Picture& rows, const Taps& taps, std::int64_t height,
                    std::int64_t row_begin) {
  Picture resized = make(rows.width, height);
  const std::int64_t bytes = rows.width * 3;
  std::vector<std::int32_t> sums(static_cast<std::size_t>(bytes));
  for (std::int64_t y = 0; y < height; ++y) {
    std::fill(sums.begin(), sums.end(), kHalf);
    const std::uint8_t* from = rows.rgb.data() + (taps.first(y) - row_begin) * bytes;
    const std::int32_t* weights = taps.weights(y);
    for (std::int64_t k = 0; k < taps.count(y); ++k, from += bytes) {
      const std::int32_t weight = weights[k];
      std::int32_t* sum = sums.data();
      for (std::int64_t i = 0; i < bytes; ++i) sum[i] += from[i] * weight;
    }
    std::uint8_t* to = resized.rgb.data() + y * bytes;
    for (std::int64_t i = 0; i < bytes; ++i)
      to[i] = rounded_byte(sums[static_cast<std::size_t>(i)]);
  }
  return resized;
}

/// Input position of each output position. Pillow adds the step up; so the sums round as its do.
std::vector<std::int64_t> nearest_positions(std::int64_t in, std::int64_t out, std::int64_t from,
                                            std::int64_t count) {
  std::vector<std::int64_t> positions;
  const double step = static_cast<double>(in) / static_cast<double>(out);
  double at = step * 0.5;
  for (std::int64_t i = 0; i < from + count; ++i, at += step) {
    if (i >= from) positions.push_back(std::min(static_cast<std::int64_t>(at), in - 1));
  }
  return positions;
}

Picture resize_nearest(const Picture& picture, const PictureSize& size,
                       const ResizeWindow& window) {
  const auto columns = nearest_positions(picture.width, size.width, window.left, window.size.width);
  const auto rows = nearest_positions(picture.height, size.height, window.top, window.size.height);
  Picture resized = make(window.size.width, window.size.height);
  std::uint8_t* to = resized.rgb.data();
  for (const std::int64_t y : rows) {
    const std::uint8_t* row = picture.rgb.data() + y * picture.width * 3;
    for (const std::int64_t x : columns) to = std::copy_n(row + x * 3, 3, to);
  }
  return resized;
}

}  // namespace

Picture resize_window(const Picture& picture, const PictureSize& size, Interpolation interpolation,
                      const ResizeWindow& window) {
  check_bytes(picture, size, window.size.width, window.size.height);
  if (interpolation == Interpolation::kNearest) return resize_nearest(picture, size, window);

  // An axis that keeps its size is left alone; bilinear and bicubic taps are then 0, 1, 0 anyway.
  const Taps columns(picture.width, size.width, window.left, window.size.width, interpolation);
  const Taps rows(picture.height, size.height, window.top, window.size.height, interpolation);
  check_bytes(picture, size, window.size.width, rows.end() - rows.begin());
  const Picture between =
      resize_columns(picture, columns, window.size.width, rows.begin(), rows.end());
  return resize_rows(between, rows, window.size.height, rows.begin());
}

}  // namespace leadsman::loaders
