#include "leadsman/preprocess.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <string>

#include "leadsman/error.h"
#include "loaders/resize.h"

namespace leadsman {
namespace {

constexpr std::int64_t kLargestSize = 32768;

bool is_side(std::int64_t side) {
  return side >= 1 && side <= kLargestSize;
}

std::string shown(const PictureSize& size) {
  return std::string("[") + std::to_string(size.height) + ", " + std::to_string(size.width) + "]";
}

void check_size(const char* field, const PictureSize& size) {
  if (is_side(size.height) && is_side(size.width)) return;
  throw_input(std::string(field) + " is " + shown(size) + ", wants sizes in 1.." +
              std::to_string(kLargestSize));
}

void check_values(const char* field, const std::vector<double>& values, int channels) {
  if (!values.empty() && static_cast<int>(values.size()) != channels) {
    throw_input(std::string(field) + " has " + std::to_string(values.size()) + " values for " +
                std::to_string(channels) + (channels == 1 ? " channel" : " channels"));
  }
  for (const double value : values) {
    // What counts is the float that it becomes.
    if (!std::isfinite(static_cast<float>(value))) {
      throw_input(std::string(field) + " has a value that is not a finite number");
    }
  }
}

void check_picture(const PictureSize& size) {
  if (size.height < 1 || size.width < 1) throw_input("a picture of " + shown(size) + " is empty");
}

void check_picture(const Picture& picture) {
  check_picture(PictureSize{picture.height, picture.width});
  if (picture.width > (std::int64_t{1} << 40) / picture.height ||
      static_cast<std::int64_t>(picture.rgb.size()) != picture.width * picture.height * 3) {
    throw_input("a picture of " + shown({picture.height, picture.width}) + " has " +
                std::to_string(picture.rgb.size()) + " bytes");
  }
}

PictureSize size_of(const Picture& picture) {
  return {picture.height, picture.width};
}

// Where the crop begins along one axis; negative when the picture is smaller. torchvision: a border
// of (crop - size) // 2 before, or an offset of round((size - crop) / 2), which rounds half to
// even.
std::int64_t crop_offset(std::int64_t size, std::int64_t crop) {
  if (crop > size) return -((crop - size) / 2);
  const std::int64_t half = (size - crop) / 2;
  return (size - crop) % 2 == 0 ? half : half + half % 2;
}

/// The part of a picture of `size` that the crop keeps, and where it goes.
struct CropPlan {
  loaders::ResizeWindow window;
  std::int64_t to_top = 0;
  std::int64_t to_left = 0;
};

CropPlan plan_crop(const PictureSize& size, const PictureSize& crop) {
  const std::int64_t top = crop_offset(size.height, crop.height);
  const std::int64_t left = crop_offset(size.width, crop.width);
  CropPlan plan;
  plan.window = {std::max<std::int64_t>(top, 0),
                 std::max<std::int64_t>(left, 0),
                 {std::min(size.height, crop.height), std::min(size.width, crop.width)}};
  plan.to_top = std::max<std::int64_t>(-top, 0);
  plan.to_left = std::max<std::int64_t>(-left, 0);
  return plan;
}

/// A black picture of `size` with the window of `picture` in it.
Picture place(const Picture& picture, std::int64_t top, std::int64_t left, const CropPlan& plan,
              const PictureSize& size) {
  Picture placed{size.width, size.height,
                 std::vector<std::uint8_t>(static_cast<std::size_t>(size.width * size.height * 3))};
  for (std::int64_t y = 0; y < plan.window.size.height; ++y) {
    std::copy_n(picture.rgb.data() + ((top + y) * picture.width + left) * 3,
                plan.window.size.width * 3,
                placed.rgb.data() + ((plan.to_top + y) * size.width + plan.to_left) * 3);
  }
  return placed;
}

Picture crop_unchecked(const Picture& picture, const PictureSize& size) {
  const CropPlan plan = plan_crop(size_of(picture), size);
  return place(picture, plan.window.top, plan.window.left, plan, size);
}

PictureSize resized_unchecked(const Preprocess& preprocess, const PictureSize& picture) {
  if (preprocess.exact) return *preprocess.exact;
  if (preprocess.shorter_side == 0) return picture;
  const auto [shorter, longer] = std::minmax(picture.height, picture.width);
  // Python's int(size * longer / shorter): one division of integers, rounded to double.
  const double quotient =
      static_cast<double>(preprocess.shorter_side * longer) / static_cast<double>(shorter);
  const auto other = static_cast<std::int64_t>(quotient);
  return picture.height <= picture.width ? PictureSize{preprocess.shorter_side, other}
                                         : PictureSize{other, preprocess.shorter_side};
}

std::int64_t scaled(std::int64_t side, double factor) {
  const double value = std::round(static_cast<double>(side) * factor);
  return static_cast<std::int64_t>(std::clamp(value, 1.0, static_cast<double>(kLargestSize)));
}

}  // namespace

Preprocess Preprocess::at_size(std::int64_t height, std::int64_t width) const {
  if (!is_side(height) || !is_side(width)) {
    throw_usage("a size of " + std::to_string(height) + "x" + std::to_string(width) +
                ", wants 1.." + std::to_string(kLargestSize));
  }
  check_preprocess(*this);
  Preprocess other = *this;
  if (crop) {
    const double down = static_cast<double>(height) / static_cast<double>(crop->height);
    const double across = static_cast<double>(width) / static_cast<double>(crop->width);
    if (exact) other.exact = {scaled(exact->height, down), scaled(exact->width, across)};
    if (shorter_side > 0) other.shorter_side = scaled(shorter_side, std::max(down, across));
    other.crop = {height, width};
  } else if (shorter_side > 0) {
    other.shorter_side = std::max(height, width);
    other.crop = {height, width};
  } else {
    other.exact = {height, width};
  }
  return other;
}

void check_preprocess(const Preprocess& preprocess) {
  if (preprocess.shorter_side < 0 || preprocess.shorter_side > kLargestSize) {
    throw_input("shorter_side is " + std::to_string(preprocess.shorter_side) + ", wants 1.." +
                std::to_string(kLargestSize));
  }
  if (preprocess.shorter_side > 0 && preprocess.exact) {
    throw_input("resize has both shorter_side and exact");
  }
  if (preprocess.exact) check_size("exact", *preprocess.exact);
  if (preprocess.crop) check_size("crop", *preprocess.crop);
  if (!std::isfinite(static_cast<float>(preprocess.scale))) {
    throw_input("scale is not a finite number");
  }
  check_values("mean", preprocess.mean, preprocess.channel_count());
  check_values("std", preprocess.stddev, preprocess.channel_count());
  for (const double deviation : preprocess.stddev) {
    if (static_cast<float>(deviation) == 0.0f) throw_input("std has a value of 0");
  }
}

PictureSize resized_size(const Preprocess& preprocess, const PictureSize& picture) {
  check_preprocess(preprocess);
  check_picture(picture);
  return resized_unchecked(preprocess, picture);
}

PictureSize output_size(const Preprocess& preprocess, const PictureSize& picture) {
  const PictureSize resized = resized_size(preprocess, picture);
  return preprocess.crop ? *preprocess.crop : resized;
}

Picture resize(const Picture& picture, const PictureSize& size, Interpolation interpolation) {
  check_picture(picture);
  if (size.height < 1 || size.width < 1) throw_input("a resize to " + shown(size) + " is empty");
  if (size == size_of(picture)) return picture;
  return loaders::resize_window(picture, size, interpolation, {0, 0, size});
}

Picture centre_crop(const Picture& picture, const PictureSize& size) {
  check_picture(picture);
  check_size("crop", size);
  return crop_unchecked(picture, size);
}

Tensor normalise(const Picture& picture, const Preprocess& preprocess) {
  check_preprocess(preprocess);
  check_picture(picture);
  const int channels = preprocess.channel_count();
  const std::int64_t area = picture.width * picture.height;
  Tensor tensor(Shape{1, channels, picture.height, picture.width});
  float* to = tensor.mutable_data();

  std::vector<std::uint8_t> grey;
  if (preprocess.channels == Channels::kGrey) {
    grey.resize(static_cast<std::size_t>(area));
    const std::uint8_t* pixel = picture.rgb.data();
    for (std::int64_t i = 0; i < area; ++i, pixel += 3) {
      grey[static_cast<std::size_t>(i)] = static_cast<std::uint8_t>(
          (pixel[0] * 19595 + pixel[1] * 38470 + pixel[2] * 7471 + 0x8000) >> 16);
    }
  }
  for (int c = 0; c < channels; ++c, to += area) {
    const auto index = static_cast<std::size_t>(c);
    const float mean = preprocess.mean.empty() ? 0.0f : static_cast<float>(preprocess.mean[index]);
    const float deviation =
        preprocess.stddev.empty() ? 1.0f : static_cast<float>(preprocess.stddev[index]);
    // 256 values, each in the float arithmetic of torchvision: divide, subtract, divide.
    std::array<float, 256> table;
    for (std::size_t value = 0; value < table.size(); ++value) {
      const auto scaled_value = static_cast<float>(static_cast<double>(value) * preprocess.scale);
      table[value] = (scaled_value - mean) / deviation;
    }
    const bool is_grey = preprocess.channels == Channels::kGrey;
    const int source_channel = preprocess.channels == Channels::kBgr ? 2 - c : c;
    const std::uint8_t* from = is_grey ? grey.data() : picture.rgb.data() + source_channel;
    const std::int64_t step = is_grey ? 1 : 3;
    for (std::int64_t i = 0; i < area; ++i) to[i] = table[from[i * step]];
  }
  return tensor;
}

Tensor preprocess(const Picture& picture, const Preprocess& preprocess) {
  const PictureSize resized = resized_size(preprocess, size_of(picture));
  check_picture(picture);
  if (resized == size_of(picture)) {
    if (!preprocess.crop) return normalise(picture, preprocess);
    return normalise(crop_unchecked(picture, *preprocess.crop), preprocess);
  }
  if (!preprocess.crop) {
    return normalise(resize(picture, resized, preprocess.interpolation), preprocess);
  }
  const CropPlan plan = plan_crop(resized, *preprocess.crop);
  const Picture window =
      loaders::resize_window(picture, resized, preprocess.interpolation, plan.window);
  if (plan.window.size == *preprocess.crop) return normalise(window, preprocess);
  return normalise(place(window, 0, 0, plan, *preprocess.crop), preprocess);
}

PreprocessStages preprocess_stages(const Picture& picture, const Preprocess& preprocess) {
  const PictureSize resized = resized_size(preprocess, size_of(picture));
  PreprocessStages stages;
  stages.resized = resize(picture, resized, preprocess.interpolation);
  stages.cropped = preprocess.crop ? centre_crop(stages.resized, *preprocess.crop) : stages.resized;
  stages.normalised = normalise(stages.cropped, preprocess);
  return stages;
}

}  // namespace leadsman
