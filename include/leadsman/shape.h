// Sizes of a tensor, in logical order.
//
// Images are [N, C, H, W], tokens [N, T, C], features [N, C]; weights keep the order of the
// checkpoint. How a tensor lies in memory is told in tensor.h, never by its shape.
#pragma once

#include <array>
#include <cstdint>
#include <initializer_list>
#include <span>
#include <string>

namespace leadsman {

class Shape {
 public:
  static constexpr int kMaxRank = 6;
  /// The most elements a tensor may have (2^40): every product of sizes below it fits in 64 bits,
  /// also once multiplied by the size of an element.
  static constexpr std::int64_t kMaxElements = std::int64_t{1} << 40;

  Shape() = default;
  /// Throws Error(kInput) when there are more than kMaxRank sizes, one is negative or the
  /// product is above kMaxElements.
  Shape(std::initializer_list<std::int64_t> sizes);
  explicit Shape(std::span<const std::int64_t> sizes);

  int rank() const { return rank_; }
  /// Requires 0 <= axis < rank().
  std::int64_t operator[](int axis) const { return sizes_[static_cast<std::size_t>(axis)]; }
  /// Product of the sizes; 1 for a scalar (rank 0).
  std::int64_t elements() const { return elements_; }
  std::span<const std::int64_t> sizes() const {
    return {sizes_.data(), static_cast<std::size_t>(rank_)};
  }
  /// A copy with one size changed.
  Shape with(int axis, std::int64_t size) const;

  bool operator==(const Shape& other) const;
  /// "[1, 64, 56, 56]"
  std::string to_string() const;

 private:
  std::array<std::int64_t, kMaxRank> sizes_{};
  int rank_ = 0;
  std::int64_t elements_ = 1;
};

/// Where the channels of an activation are: axis 1 of images and features, the last axis of tokens.
/// Requires rank 2, 3 or 4.
int channel_axis(const Shape& shape);
/// How many channels there are: the size of channel_axis().
/// Requires rank 2, 3 or 4.
std::int64_t channel_count(const Shape& shape);
/// Positions of an activation, each holding channel_count() neighbouring floats in memory:
/// N*H*W of images, N*T of tokens, N of features.
std::int64_t position_count(const Shape& shape);

}  // namespace leadsman
