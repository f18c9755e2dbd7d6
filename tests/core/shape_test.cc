#include "leadsman/shape.h"

#include <limits>

#include <gtest/gtest.h>

#include "leadsman/error.h"

namespace leadsman {
namespace {

std::string message_of(std::initializer_list<std::int64_t> sizes) {
  try {
    return "accepted: " + Shape(sizes).to_string();
  } catch (const Error& error) {
    EXPECT_EQ(error.kind(), ErrorKind::kInput);
    return error.what();
  }
}

TEST(Shape, KnowsItsSizes) {
  const Shape shape{2, 3, 5, 7};
  EXPECT_EQ(shape.rank(), 4);
  EXPECT_EQ(shape[0], 2);
  EXPECT_EQ(shape[3], 7);
  EXPECT_EQ(shape.elements(), 210);
  EXPECT_EQ(shape.to_string(), "[2, 3, 5, 7]");
  EXPECT_EQ(shape.sizes().size(), 4U);
}

TEST(Shape, AScalarHasOneElement) {
  EXPECT_EQ(Shape().elements(), 1);
  EXPECT_EQ(Shape().rank(), 0);
  EXPECT_EQ(Shape().to_string(), "[]");
}

TEST(Shape, AZeroMakesItEmpty) {
  EXPECT_EQ((Shape{3, 0, 4}).elements(), 0);
  EXPECT_EQ((Shape{0}).elements(), 0);
}

TEST(Shape, HoldsAtMostTwoToTheForty) {
  constexpr std::int64_t kMost = Shape::kMaxElements;
  EXPECT_EQ(Shape{kMost}.elements(), kMost);
  EXPECT_EQ((Shape{1 << 20, 1 << 20}).elements(), kMost);
  EXPECT_EQ(message_of({1 << 20, 1 << 20, 2}),
            "a shape of more than 2^40 elements: [1048576, 1048576, 2]");
  EXPECT_EQ(message_of({kMost, kMost}),
            "a shape of more than 2^40 elements: [1099511627776, 1099511627776]");
}

TEST(Shape, RefusesWhatWouldOverflow) {
  constexpr std::int64_t kHuge = std::int64_t{1} << 62;
  // The products are 0, 2^62, 2^63 and 2^64, which is 0 in 64 bits.
  EXPECT_EQ(message_of({0, kHuge}), "a size above 2^40 in a shape: 4611686018427387904");
  EXPECT_EQ(message_of({kHuge}), "a size above 2^40 in a shape: 4611686018427387904");
  EXPECT_EQ(message_of({kHuge, 2}), "a size above 2^40 in a shape: 4611686018427387904");
  EXPECT_EQ(message_of({kHuge, 4}), "a size above 2^40 in a shape: 4611686018427387904");
  constexpr std::int64_t kRoot = std::int64_t{1} << 32;
  EXPECT_EQ(message_of({kRoot, kRoot}),
            "a shape of more than 2^40 elements: [4294967296, 4294967296]");
  EXPECT_EQ(message_of({std::numeric_limits<std::int64_t>::max(), 1, 1}),
            "a size above 2^40 in a shape: 9223372036854775807");
}

TEST(Shape, RefusesNegativeSizesAndHighRanks) {
  EXPECT_EQ(message_of({1, -1}), "a negative size in a shape: -1");
  EXPECT_EQ(message_of({0, std::numeric_limits<std::int64_t>::min()}),
            "a negative size in a shape: -9223372036854775808");
  EXPECT_EQ(Shape({1, 1, 1, 1, 1, 1}).rank(), 6);
  EXPECT_EQ(message_of({1, 1, 1, 1, 1, 1, 1}), "a tensor of rank 7 (at most 6)");
}

TEST(Shape, ComparesRankAndSizes) {
  EXPECT_EQ((Shape{2, 3}), (Shape{2, 3}));
  EXPECT_NE((Shape{2, 3}), (Shape{3, 2}));
  EXPECT_NE((Shape{2, 3}), (Shape{2, 3, 1}));
  EXPECT_NE((Shape{2, 0}), (Shape{2}));
}

TEST(Shape, WithChangesOneSize) {
  const Shape shape{2, 3, 4};
  EXPECT_EQ(shape.with(1, 7), (Shape{2, 7, 4}));
  EXPECT_EQ(shape, (Shape{2, 3, 4}));
  EXPECT_THROW(shape.with(1, Shape::kMaxElements), Error);
}

TEST(Shape, CountsChannelsAndPositions) {
  EXPECT_EQ(channel_axis({2, 3, 5, 7}), 1);
  EXPECT_EQ(channel_axis({2, 3, 5}), 2);
  EXPECT_EQ(channel_axis({2, 3}), 1);
  EXPECT_EQ(channel_count({2, 3, 5, 7}), 3);
  EXPECT_EQ(position_count({2, 3, 5, 7}), 70);
  EXPECT_EQ(channel_count({2, 3, 5}), 5);
  EXPECT_EQ(position_count({2, 3, 5}), 6);
  EXPECT_EQ(channel_count({2, 3}), 3);
  EXPECT_EQ(position_count({2, 3}), 2);
}

}  // namespace
}  // namespace leadsman
