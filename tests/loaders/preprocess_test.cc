// Preprocessing: resizes equal to Pillow 9.4's, inputs equal to torchvision 0.14.1's, bit for bit.
#include "leadsman/preprocess.h"

#include <cmath>
#include <cstring>
#include <limits>

#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "loaders/resize.h"
#include "tests/loaders/picture_cases.h"
#include "tests/support/compare.h"
#include "tests/support/random.h"

namespace leadsman {
namespace {

using testing::expect_same_bits;
using testing::Random;
using testing::pictures::all_picture_cases;
using testing::pictures::expect_same_picture;
using testing::pictures::interpolation_named;

constexpr Interpolation kAll[] = {Interpolation::kNearest, Interpolation::kBilinear,
                                  Interpolation::kBicubic};

Picture random_picture(std::int64_t width, std::int64_t height, std::uint64_t seed) {
  Random random(seed);
  Picture picture{width, height, {}};
  for (std::int64_t i = 0; i < width * height * 3; ++i) {
    picture.rgb.push_back(static_cast<std::uint8_t>(random.bits() & 255));
  }
  return picture;
}

PictureSize size_named(const std::string& text) {
  const std::size_t cross = text.find('x');
  return {std::stoll(text.substr(0, cross)), std::stoll(text.substr(cross + 1))};
}

// Outside check: Image.resize of Pillow 9.4.
TEST(Resize, IsPillows) {
  for (const auto& cases : all_picture_cases()) {
    const auto resizes = cases.of("resize");
    EXPECT_GE(resizes.size(), 30u);
    for (const auto& c : resizes) {
      SCOPED_TRACE(c.text());
      const PictureSize size{c.number(2), c.number(3)};
      expect_same_picture(resize(read_picture(c.picture), size, interpolation_named(c.words.at(1))),
                          size.height, size.width,
                          cases.bytes(c.number(4), size.height * size.width * 3));
    }
  }
}

// Outside check: Resize, CenterCrop, ToTensor and Normalize of torchvision 0.14.1.
TEST(Preprocess, IsTorchvisions) {
  for (const auto& cases : all_picture_cases()) {
    const auto all = cases.of("preprocess");
    EXPECT_GE(all.size(), 10u);
    for (const auto& c : all) {
      SCOPED_TRACE(c.text());
      Preprocess how;
      const std::string& resize_word = c.words.at(1);
      if (resize_word.rfind("shorter:", 0) == 0)
        how.shorter_side = std::stoll(resize_word.substr(8));
      if (resize_word.rfind("exact:", 0) == 0) how.exact = size_named(resize_word.substr(6));
      how.interpolation = interpolation_named(c.words.at(2));
      if (c.words.at(3) != "none") how.crop = size_named(c.words.at(3));
      if (c.words.at(4) == "BGR") how.channels = Channels::kBgr;
      if (c.words.at(4) == "GREY") how.channels = Channels::kGrey;
      if (c.words.at(5) == "imagenet") {
        how.mean = {0.485, 0.456, 0.406};
        how.stddev = {0.229, 0.224, 0.225};
        how.mean.resize(static_cast<std::size_t>(how.channel_count()));
        how.stddev.resize(static_cast<std::size_t>(how.channel_count()));
      }
      const Shape shape{1, c.number(6), c.number(7), c.number(8)};
      const Tensor expected(shape, cases.floats(c.number(9), shape.elements()));
      const Picture picture = read_picture(c.picture);
      expect_same_bits(preprocess(picture, how), expected);
      expect_same_bits(preprocess_stages(picture, how).normalised, expected);
      EXPECT_EQ(output_size(how, {picture.height, picture.width}),
                (PictureSize{shape[2], shape[3]}));
    }
  }
}

TEST(Preprocess, FusedResizeAndCropEqualTheStages) {
  Random random(3);
  for (int i = 0; i < 200; ++i) {
    const Picture picture = random_picture(random.integer(1, 60), random.integer(1, 60),
                                           100 + static_cast<unsigned>(i));
    Preprocess how;
    how.interpolation = random.pick(kAll);
    if (random.coin()) {
      how.shorter_side = random.integer(1, 30);
    } else {
      how.exact = PictureSize{random.integer(1, 50), random.integer(1, 50)};
    }
    how.crop = PictureSize{random.integer(1, 40), random.integer(1, 40)};
    const PreprocessStages stages = preprocess_stages(picture, how);
    EXPECT_EQ(resized_size(how, {picture.height, picture.width}),
              (PictureSize{stages.resized.height, stages.resized.width}));
    expect_same_bits(preprocess(picture, how), stages.normalised);
  }
}

TEST(Resize, WindowIsAPartOfTheWhole) {
  const Picture picture = random_picture(41, 37, 5);
  Random random(6);
  for (const Interpolation interpolation : kAll) {
    for (int i = 0; i < 40; ++i) {
      const PictureSize size{random.integer(1, 70), random.integer(1, 70)};
      const Picture whole = resize(picture, size, interpolation);
      const PictureSize part{random.integer(1, size.height), random.integer(1, size.width)};
      const loaders::ResizeWindow window{random.integer(0, size.height - part.height),
                                         random.integer(0, size.width - part.width), part};
      const Picture cut = loaders::resize_window(picture, size, interpolation, window);
      for (std::int64_t y = 0; y < part.height; ++y) {
        const auto* row = whole.rgb.data() + ((window.top + y) * size.width + window.left) * 3;
        ASSERT_EQ(std::memcmp(cut.rgb.data() + y * part.width * 3, row,
                              static_cast<std::size_t>(part.width * 3)),
                  0);
      }
    }
  }
}

// A property of every resampling whose weights sum to 1: a plain picture stays plain.
TEST(Resize, KeepsPlainPictures) {
  Picture plain{50, 30, {}};
  for (int i = 0; i < 50 * 30; ++i) plain.rgb.insert(plain.rgb.end(), {0, 131, 255});
  for (const Interpolation interpolation : kAll) {
    for (const PictureSize size : {PictureSize{7, 11}, {64, 90}, {1, 1}, {30, 2}}) {
      const Picture resized = resize(plain, size, interpolation);
      for (std::size_t i = 0; i < resized.rgb.size(); ++i) {
        ASSERT_EQ(int{resized.rgb[i]}, int{plain.rgb[i % 3]});
      }
    }
  }
}

TEST(Resize, LeavesInputsOfTheSameSizeAlone) {
  const Picture picture = random_picture(9, 8, 7);
  for (const Interpolation interpolation : kAll) {
    EXPECT_EQ(resize(picture, {8, 9}, interpolation).rgb, picture.rgb);
  }
}

// torchvision's size rule, by hand: int(16 * 37 / 29) = 20, whichever side is shorter.
TEST(Preprocess, ShorterSideKeepsProportions) {
  Preprocess how;
  how.shorter_side = 16;
  EXPECT_EQ(resized_size(how, {29, 37}), (PictureSize{16, 20}));
  EXPECT_EQ(resized_size(how, {37, 29}), (PictureSize{20, 16}));
  EXPECT_EQ(resized_size(how, {29, 29}), (PictureSize{16, 16}));
  how.shorter_side = 256;
  EXPECT_EQ(resized_size(how, {1080, 1920}), (PictureSize{256, 455}));
  EXPECT_EQ(resized_size(how, {1, 1000}), (PictureSize{256, 256000}));
}

// round() of Python goes to the even neighbour: offsets of 1, 3, 5, 7 halves are 0, 2, 2, 4.
TEST(CentreCrop, OffsetsRoundHalvesToEven) {
  Picture picture{1, 20, {}};
  for (int y = 0; y < 20; ++y)
    picture.rgb.insert(picture.rgb.end(), 3, static_cast<std::uint8_t>(y));
  const int first_rows[][2] = {{19, 0}, {17, 2}, {15, 2}, {13, 4}, {18, 1}, {16, 2}, {20, 0}};
  for (const auto& [height, first] : first_rows) {
    EXPECT_EQ(int{centre_crop(picture, {height, 1}).rgb[0]}, first) << height;
  }
}

TEST(CentreCrop, PadsWithBlack) {
  const Picture dot{1, 1, {7, 8, 9}};
  const Picture padded = centre_crop(dot, {2, 4});
  // Borders of (4 - 1) // 2 = 1 and (2 - 1) // 2 = 0 before.
  std::vector<std::uint8_t> expected(2 * 4 * 3, 0);
  expected[3] = 7;
  expected[4] = 8;
  expected[5] = 9;
  EXPECT_EQ(padded.rgb, expected);
}

// ToTensor divides by 255 in float; the format says scale. All 256 values must agree.
TEST(Normalise, ScaleOfOneTo255IsADivision) {
  Picture ramp{256, 1, {}};
  for (int i = 0; i < 256; ++i) ramp.rgb.insert(ramp.rgb.end(), 3, static_cast<std::uint8_t>(i));
  Preprocess how;
  how.scale = 0.00392156862745098;  // as in graph.json
  const Tensor tensor = normalise(ramp, how);
  for (int i = 0; i < 256; ++i) EXPECT_EQ(tensor.data()[i], static_cast<float>(i) / 255.0f) << i;
}

TEST(Normalise, ChannelsMeansAndDeviations) {
  const Picture dot{1, 1, {10, 20, 30}};
  Preprocess how;
  how.scale = 1.0;
  how.mean = {1.0, 2.0, 3.0};
  how.stddev = {2.0, 4.0, 8.0};
  const auto values = [&] {
    const Tensor tensor = normalise(dot, how);
    return std::vector<float>(tensor.values().begin(), tensor.values().end());
  };
  EXPECT_EQ(values(), (std::vector<float>{4.5f, 4.5f, 3.375f}));
  how.channels = Channels::kBgr;
  EXPECT_EQ(values(), (std::vector<float>{14.5f, 4.5f, 0.875f}));
  how.channels = Channels::kGrey;
  how.mean.clear();
  how.stddev.clear();
  // (10 * 19595 + 20 * 38470 + 30 * 7471 + 32768) >> 16
  EXPECT_EQ(values(), (std::vector<float>{18.0f}));
}

TEST(Preprocess, AtSizeScalesResizeAndCrop) {
  Preprocess how;
  how.shorter_side = 256;
  how.crop = PictureSize{224, 224};
  Preprocess other = how.at_size(448, 448);
  EXPECT_EQ(other.shorter_side, 512);
  EXPECT_EQ(other.crop, (PictureSize{448, 448}));
  other = how.at_size(112, 160);  // the larger factor: 160 / 224
  EXPECT_EQ(other.shorter_side, 183);
  EXPECT_EQ(other.crop, (PictureSize{112, 160}));
  EXPECT_EQ(how.at_size(224, 224).shorter_side, 256);

  how.shorter_side = 0;
  how.exact = PictureSize{256, 300};
  other = how.at_size(112, 224);
  EXPECT_EQ(other.exact, (PictureSize{128, 300}));
  EXPECT_EQ(other.crop, (PictureSize{112, 224}));

  how.crop.reset();
  other = how.at_size(50, 60);
  EXPECT_EQ(other.exact, (PictureSize{50, 60}));
  EXPECT_FALSE(other.crop);

  how.exact.reset();
  other = how.at_size(50, 60);
  EXPECT_EQ(other.exact, (PictureSize{50, 60}));

  how.shorter_side = 99;
  other = how.at_size(50, 60);
  EXPECT_EQ(other.shorter_side, 60);
  EXPECT_EQ(other.crop, (PictureSize{50, 60}));
  EXPECT_FALSE(other.exact);
  EXPECT_EQ(how.shorter_side, 99);
}

TEST(Preprocess, AtSizeAlwaysGivesThatSize) {
  Random random(11);
  for (int i = 0; i < 100; ++i) {
    Preprocess how;
    const std::int64_t kind = random.integer(0, 2);
    if (kind == 0) how.shorter_side = random.integer(1, 80);
    if (kind == 1) how.exact = PictureSize{random.integer(1, 80), random.integer(1, 80)};
    if (random.coin()) how.crop = PictureSize{random.integer(1, 60), random.integer(1, 60)};
    const std::int64_t height = random.integer(1, 90);
    const std::int64_t width = random.integer(1, 90);
    const Picture picture = random_picture(random.integer(1, 40), random.integer(1, 40), 12);
    const Tensor tensor = preprocess(picture, how.at_size(height, width));
    EXPECT_EQ(tensor.shape(), (Shape{1, 3, height, width}));
  }
}

template <typename Function>
void expect_error(ErrorKind kind, const char* part, const Function& function) {
  try {
    function();
    ADD_FAILURE() << "no error: " << part;
  } catch (const Error& error) {
    EXPECT_EQ(error.kind(), kind) << error.what();
    EXPECT_NE(std::string(error.what()).find(part), std::string::npos) << error.what();
  }
}

TEST(Preprocess, RefusesFieldsThatContradict) {
  struct Case {
    const char* part;
    Preprocess how;
  };
  const double nan = std::numeric_limits<double>::quiet_NaN();
  std::vector<Case> cases(12);
  cases[0] = {"shorter_side is -1", {}};
  cases[0].how.shorter_side = -1;
  cases[1] = {"shorter_side is 32769", {}};
  cases[1].how.shorter_side = 32769;
  cases[2] = {"both", {}};
  cases[2].how.shorter_side = 5;
  cases[2].how.exact = PictureSize{5, 5};
  cases[3] = {"exact is [0, 5]", {}};
  cases[3].how.exact = PictureSize{0, 5};
  cases[4] = {"crop is [5, 32769]", {}};
  cases[4].how.crop = PictureSize{5, 32769};
  cases[5] = {"scale", {}};
  cases[5].how.scale = nan;
  cases[6] = {"scale", {}};
  cases[6].how.scale = 1e39;  // finite, but not as a float
  cases[7] = {"mean has 2 values for 3 channels", {}};
  cases[7].how.mean = {1, 2};
  cases[8] = {"std has 3 values for 1 channel", {}};
  cases[8].how.stddev = {1, 2, 3};
  cases[8].how.channels = Channels::kGrey;
  cases[9] = {"std has a value of 0", {}};
  cases[9].how.stddev = {1, 0, 1};
  cases[10] = {"std has a value of 0", {}};
  cases[10].how.stddev = {1, 1e-60, 1};  // 0 as a float
  cases[11] = {"mean has a value that is not", {}};
  cases[11].how.mean = {1, nan, 1};
  const Picture dot{1, 1, {1, 2, 3}};
  for (const Case& c : cases) {
    expect_error(ErrorKind::kInput, c.part, [&] { preprocess(dot, c.how); });
    expect_error(ErrorKind::kInput, c.part, [&] { check_preprocess(c.how); });
  }
}

TEST(Preprocess, RefusesWhatCannotBe) {
  const Picture dot{1, 1, {1, 2, 3}};
  Preprocess how;
  expect_error(ErrorKind::kUsage, "0x5", [&] { how.at_size(0, 5); });
  expect_error(ErrorKind::kUsage, "5x40000", [&] { how.at_size(5, 40000); });
  expect_error(ErrorKind::kInput, "empty", [&] { preprocess(Picture{}, how); });
  expect_error(ErrorKind::kInput, "bytes", [&] { preprocess(Picture{2, 1, {1, 2, 3}}, how); });
  expect_error(ErrorKind::kInput, "empty", [&] { resize(dot, {0, 1}, Interpolation::kBilinear); });
  // 1 x 30000 at 20000 across would be 20000 x 600000000.
  how.shorter_side = 20000;
  const Picture line = random_picture(30000, 1, 13);
  expect_error(ErrorKind::kInput, "1 GiB", [&] { preprocess(line, how); });
  // Only what the crop keeps is resized: with a crop it can be done.
  how.crop = PictureSize{4, 4};
  EXPECT_EQ(preprocess(line, how).shape(), (Shape{1, 3, 4, 4}));
}

}  // namespace
}  // namespace leadsman
