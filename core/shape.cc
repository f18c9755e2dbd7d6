#include "leadsman/shape.h"

#include <cassert>

#include "leadsman/error.h"

namespace leadsman {

Shape::Shape(std::initializer_list<std::int64_t> sizes)
    : Shape(std::span<const std::int64_t>(sizes.begin(), sizes.size())) {}

Shape::Shape(std::span<const std::int64_t> sizes) {
  if (sizes.size() > kMaxRank) {
    throw_input("a tensor of rank " + std::to_string(sizes.size()) + " (at most " +
                std::to_string(kMaxRank) + ")");
  }
  rank_ = static_cast<int>(sizes.size());
  bool empty = false;
  for (std::size_t i = 0; i < sizes.size(); ++i) {
    if (sizes[i] < 0) throw_input("a negative size in a shape: " + std::to_string(sizes[i]));
    // Beside a zero too, so that sums of sizes cannot overflow anywhere.
    if (sizes[i] > kMaxElements) {
      throw_input("a size above 2^40 in a shape: " + std::to_string(sizes[i]));
    }
    sizes_[i] = sizes[i];
    if (sizes[i] == 0) empty = true;
  }
  if (empty) {
    elements_ = 0;
    return;
  }
  for (const std::int64_t size : sizes) {
    if (size > kMaxElements / elements_) {
      throw_input("a shape of more than 2^40 elements: " + to_string());
    }
    elements_ *= size;
  }
}

Shape Shape::with(int axis, std::int64_t size) const {
  assert(axis >= 0 && axis < rank_);
  std::array<std::int64_t, kMaxRank> sizes = sizes_;
  sizes[static_cast<std::size_t>(axis)] = size;
  return Shape(std::span<const std::int64_t>(sizes.data(), static_cast<std::size_t>(rank_)));
}

bool Shape::operator==(const Shape& other) const {
  return rank_ == other.rank_ && sizes_ == other.sizes_;
}

std::string Shape::to_string() const {
  std::string text = "[";
  for (int i = 0; i < rank_; ++i) {
    if (i > 0) text += ", ";
    text += std::to_string((*this)[i]);
  }
  return text + "]";
}

int channel_axis(const Shape& shape) {
  assert(shape.rank() >= 2 && shape.rank() <= 4);
  return shape.rank() == 3 ? 2 : 1;
}

std::int64_t channel_count(const Shape& shape) {
  return shape[channel_axis(shape)];
}

std::int64_t position_count(const Shape& shape) {
  switch (shape.rank()) {
    case 4:
      return shape[0] * shape[2] * shape[3];
    case 3:
      return shape[0] * shape[1];
    default:
      assert(shape.rank() == 2);
      return shape[0];
  }
}

}  // namespace leadsman
