#include "loaders/element_type.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <cstdio>
#include <limits>
#include <span>
#include <string>

#include "leadsman/error.h"
#include "loaders/bytes.h"
#include "loaders/half.h"

namespace leadsman {

std::string_view element_type_name(ElementType type) {
  switch (type) {
    case ElementType::kBool:
      return "BOOL";
    case ElementType::kU8:
      return "U8";
    case ElementType::kI8:
      return "I8";
    case ElementType::kU16:
      return "U16";
    case ElementType::kI16:
      return "I16";
    case ElementType::kU32:
      return "U32";
    case ElementType::kI32:
      return "I32";
    case ElementType::kU64:
      return "U64";
    case ElementType::kI64:
      return "I64";
    case ElementType::kF16:
      return "F16";
    case ElementType::kBF16:
      return "BF16";
    case ElementType::kF32:
      return "F32";
    case ElementType::kF64:
      return "F64";
  }
  return "";
}

std::int64_t element_bytes(ElementType type) {
  switch (type) {
    case ElementType::kBool:
    case ElementType::kU8:
    case ElementType::kI8:
      return 1;
    case ElementType::kU16:
    case ElementType::kI16:
    case ElementType::kF16:
    case ElementType::kBF16:
      return 2;
    case ElementType::kU32:
    case ElementType::kI32:
    case ElementType::kF32:
      return 4;
    case ElementType::kU64:
    case ElementType::kI64:
    case ElementType::kF64:
      return 8;
  }
  return 0;
}

bool is_floating(ElementType type) {
  return type == ElementType::kF16 || type == ElementType::kBF16 || type == ElementType::kF32 ||
         type == ElementType::kF64;
}

namespace loaders {
namespace {

template <typename T>
T load(const std::byte* from, bool big_endian) {
  if (!big_endian) return load_le<T>(from);
  std::array<std::byte, sizeof(T)> reversed;
  std::reverse_copy(from, from + sizeof(T), reversed.begin());
  return load_le<T>(reversed.data());
}

float narrowed(double value) {
  const float result = static_cast<float>(value);
  if (std::isinf(result) && !std::isinf(value)) {
    std::array<char, 32> digits{};
    std::snprintf(digits.data(), digits.size(), "%.17g", value);
    throw_input("the value " + std::string(digits.data()) + " is beyond float32");
  }
  return result;
}

// Fills `to` in row-major order from elements of type Stored.
template <typename Stored, typename Convert>
void fill(const ArrayLayout& layout, const Shape& shape, const std::byte* from, float* to,
          Convert convert) {
  const std::int64_t count = shape.elements();
  constexpr std::int64_t kBytes = static_cast<std::int64_t>(sizeof(Stored));
  if (!layout.fortran_order) {
    for (std::int64_t i = 0; i < count; ++i) {
      to[i] = convert(load<Stored>(from + i * kBytes, layout.big_endian));
    }
    return;
  }
  std::array<std::int64_t, Shape::kMaxRank> strides{};
  std::int64_t stride = 1;
  for (int axis = 0; axis < shape.rank(); ++axis) {
    strides[static_cast<std::size_t>(axis)] = stride;
    stride *= shape[axis];
  }
  std::array<std::int64_t, Shape::kMaxRank> index{};
  std::int64_t at = 0;
  for (std::int64_t i = 0; i < count; ++i) {
    to[i] = convert(load<Stored>(from + at * kBytes, layout.big_endian));
    for (int axis = shape.rank() - 1; axis >= 0; --axis) {  // an odometer, the last wheel fastest
      const std::size_t a = static_cast<std::size_t>(axis);
      at += strides[a];
      if (++index[a] < shape[axis]) break;
      at -= strides[a] * shape[axis];
      index[a] = 0;
    }
  }
}

template <typename Stored>
void fill_integers(const ArrayLayout& layout, const Shape& shape, const std::byte* from,
                   float* to) {
  fill<Stored>(layout, shape, from, to, [](Stored value) { return static_cast<float>(value); });
}

void convert(const ArrayLayout& layout, const Shape& shape, const std::byte* from, float* to) {
  switch (layout.info.type) {
    case ElementType::kBool:
      return fill<std::uint8_t>(layout, shape, from, to,
                                [](std::uint8_t value) { return value != 0 ? 1.0f : 0.0f; });
    case ElementType::kU8:
      return fill_integers<std::uint8_t>(layout, shape, from, to);
    case ElementType::kI8:
      return fill_integers<std::int8_t>(layout, shape, from, to);
    case ElementType::kU16:
      return fill_integers<std::uint16_t>(layout, shape, from, to);
    case ElementType::kI16:
      return fill_integers<std::int16_t>(layout, shape, from, to);
    case ElementType::kU32:
      return fill_integers<std::uint32_t>(layout, shape, from, to);
    case ElementType::kI32:
      return fill_integers<std::int32_t>(layout, shape, from, to);
    case ElementType::kU64:
      return fill_integers<std::uint64_t>(layout, shape, from, to);
    case ElementType::kI64:
      return fill_integers<std::int64_t>(layout, shape, from, to);
    case ElementType::kF16:
      return fill<std::uint16_t>(layout, shape, from, to, half_to_float);
    case ElementType::kBF16:
      return fill<std::uint16_t>(layout, shape, from, to, bfloat16_to_float);
    case ElementType::kF32:
      return fill<float>(layout, shape, from, to, [](float value) { return value; });
    case ElementType::kF64:
      return fill<double>(layout, shape, from, to, narrowed);
  }
}

}  // namespace

std::optional<std::int64_t> array_bytes(const TensorInfo& info) {
  if (std::find(info.shape.begin(), info.shape.end(), 0) != info.shape.end()) return 0;
  std::int64_t bytes = element_bytes(info.type);
  for (const std::int64_t size : info.shape) {
    if (size > std::numeric_limits<std::int64_t>::max() / bytes) return std::nullopt;
    bytes *= size;
  }
  return bytes;
}

std::string shape_text(const std::vector<std::int64_t>& shape) {
  std::string text = "[";
  for (const std::int64_t size : shape) {
    if (text.size() > 1) text += ", ";
    text += std::to_string(size);
  }
  return text + "]";
}

Tensor make_tensor(const ArrayLayout& layout, const std::byte* data,
                   std::shared_ptr<const void> owner, Tensor::Release release) {
  const Shape shape{std::span<const std::int64_t>(layout.info.shape)};
  if (shape.elements() == 0) return Tensor(shape);
  const bool as_it_lies =
      layout.info.type == ElementType::kF32 && !layout.big_endian && !layout.fortran_order;
  if (as_it_lies && reinterpret_cast<std::uintptr_t>(data) % alignof(float) == 0) {
    return Tensor::borrow(shape, reinterpret_cast<const float*>(data), std::move(owner), release);
  }
  Tensor tensor(shape);
  if (as_it_lies) {
    std::memcpy(tensor.mutable_data(), data,
                static_cast<std::size_t>(shape.elements()) * sizeof(float));
  } else {
    convert(layout, shape, data, tensor.mutable_data());
  }
  return tensor;
}

}  // namespace loaders
}  // namespace leadsman
