#include "leadsman/maps.h"

#include <array>
#include <limits>

#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "observe/maps/canvas.h"

namespace leadsman {
namespace {

Colour pixel(const Picture& picture, std::int64_t x, std::int64_t y) {
  const auto at = static_cast<std::size_t>((y * picture.width + x) * 3);
  return {picture.rgb[at], picture.rgb[at + 1], picture.rgb[at + 2]};
}

int lightness(Colour c) {
  return 299 * c[0] + 587 * c[1] + 114 * c[2];
}

bool contains(const Picture& picture, Colour colour) {
  for (std::int64_t y = 0; y < picture.height; ++y) {
    for (std::int64_t x = 0; x < picture.width; ++x) {
      if (pixel(picture, x, y) == colour) return true;
    }
  }
  return false;
}

TEST(Colours, RiseInLightnessSoThatGreyPrintsKeepTheOrder) {
  for (int i = 0; i < 100; ++i) {
    EXPECT_LT(lightness(rising_colour(i / 100.0)), lightness(rising_colour((i + 1) / 100.0)));
  }
}

TEST(Colours, OfEitherSignDarkenAwayFromZero) {
  for (int i = 0; i < 100; ++i) {
    EXPECT_GT(lightness(signed_colour(i / 100.0)), lightness(signed_colour((i + 1) / 100.0)));
    EXPECT_GT(lightness(signed_colour(-i / 100.0)), lightness(signed_colour(-(i + 1) / 100.0)));
  }
  EXPECT_GT(signed_colour(1.0)[0], signed_colour(1.0)[2]);    // rust
  EXPECT_LT(signed_colour(-1.0)[0], signed_colour(-1.0)[2]);  // blue
}

TEST(ChannelSheet, ShowsEachPlaceOfEachChannel) {
  Tensor activation({1, 2, 2, 2}, {1, 0, 0, 0, 0, 0, 0, 1});
  const ChannelSheet sheet = channel_sheet(activation, 0, std::nullopt);
  EXPECT_EQ(sheet.channels, 2);
  EXPECT_EQ(sheet.full_scale, 1.0);
  ASSERT_EQ(sheet.columns, 2);
  const auto top = rising_colour(1.0);
  const auto low = rising_colour(0.0);
  // Cells of 24 x 24 pixels behind a gap of 4 and a line of numbers of 7.
  EXPECT_EQ(pixel(sheet.picture, 5, 12), top);
  EXPECT_EQ(pixel(sheet.picture, 5 + 24, 12), low);
  EXPECT_EQ(pixel(sheet.picture, 4 + 52 + 25, 11 + 25), top);
}

TEST(ChannelSheet, TakesTokensFeaturesAndBothSigns) {
  Tensor tokens({1, 5, 3});
  tokens.mutable_data()[3] = -2.0F;  // token 1, the first patch, channel 0
  const ChannelSheet sheet = channel_sheet(tokens, 0, TokenGrid{1, 2, 2});
  EXPECT_TRUE(contains(sheet.picture, signed_colour(-1.0)));
  EXPECT_EQ(channel_sheet(Tensor({2, 7}), 1, std::nullopt).channels, 7);
  EXPECT_EQ(channel_sheet(Tensor({1, 50, 2, 2}), 0, std::nullopt, 10).channels, 10);
}

TEST(ChannelSheet, SurvivesValuesThatAreNotFinite) {
  Tensor activation({1, 1, 1, 3}, {std::numeric_limits<float>::quiet_NaN(),
                                   std::numeric_limits<float>::infinity(), 1.0F});
  EXPECT_GT(channel_sheet(activation, 0, std::nullopt).picture.width, 0);
}

TEST(ChannelSheet, RefusesWhatHasNoChannels) {
  EXPECT_THROW(channel_sheet(Tensor({3}), 0, std::nullopt), Error);
  EXPECT_THROW(channel_sheet(Tensor({1, 3}), 1, std::nullopt), Error);
  EXPECT_THROW(channel_sheet(Tensor({1, 5, 3}), 0, TokenGrid{0, 2, 2}), Error);
}

TEST(TokenGrid, LeavesClassTokensOut) {
  const TokenGrid square = token_grid(197, std::nullopt);
  EXPECT_EQ(square.prefix, 1);
  EXPECT_EQ(square.height, 14);
  const TokenGrid wide = token_grid(36, PictureSize{5, 7});
  EXPECT_EQ(wide.prefix, 1);
  EXPECT_EQ(wide.height, 5);
  EXPECT_EQ(wide.width, 7);
}

TEST(AttentionSheet, LightsThePatchThatIsLookedAt) {
  Picture picture = blank_picture(64, 64, {200, 100, 50});
  Tensor weights({1, 1, 5, 5});
  weights.mutable_data()[4] = 1.0F;  // token 0 looks at the last patch
  const Picture sheet = attention_sheet(weights, 0, 0, TokenGrid{1, 2, 2}, picture);
  // One head and the mean; tiles of 192 pixels behind a gap of 8 and a title of 14.
  const Colour dark = pixel(sheet, 8 + 10, 22 + 10);
  const Colour bright = pixel(sheet, 8 + 180, 22 + 180);
  EXPECT_GT(lightness(bright), 2 * lightness(dark));
  EXPECT_EQ(dark[0], dark[2]);  // grey
}

TEST(AttentionSheet, RefusesWhatDoesNotFit) {
  const Picture picture = blank_picture(8, 8, {0, 0, 0});
  EXPECT_THROW(attention_sheet(Tensor({1, 2, 5, 5}), 0, 5, TokenGrid{1, 2, 2}, picture), Error);
  EXPECT_THROW(attention_sheet(Tensor({1, 2, 5, 5}), 0, 0, TokenGrid{0, 2, 2}, picture), Error);
  EXPECT_THROW(attention_sheet(Tensor({1, 2, 5, 5}), 1, 0, TokenGrid{1, 2, 2}, picture), Error);
}

}  // namespace
}  // namespace leadsman
