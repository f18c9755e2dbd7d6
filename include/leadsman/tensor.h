// Float tensors: owned ones in logical order, and views of activations as they lie in memory.
#pragma once

#include <cstddef>
#include <memory>
#include <span>
#include <vector>

#include "leadsman/shape.h"

namespace leadsman {

/// A dense float32 tensor in logical row-major order: what weights, captures and references are.
///
/// Copies share their storage; `mutable_data` makes it unique first (copy on write), so a Tensor
/// behaves as a value. Reading one Tensor from several threads is safe.
class Tensor {
 public:
  Tensor() = default;
  /// Zero-filled.
  explicit Tensor(Shape shape);
  /// Throws Error(kInput) when values.size() differs from shape.elements().
  Tensor(Shape shape, std::vector<float> values);
  /// What release() does with borrowed memory.
  using Release = void (*)(const void* data, std::size_t bytes);
  /// Borrows memory that `owner` keeps alive (a mapped file, say). `data` is aligned to 4 bytes.
  static Tensor borrow(Shape shape, const float* data, std::shared_ptr<const void> owner,
                       Release release = nullptr);

  const Shape& shape() const { return shape_; }
  std::int64_t elements() const { return shape_.elements(); }
  const float* data() const { return data_; }
  std::span<const float> values() const {
    return {data_, static_cast<std::size_t>(data_ ? elements() : 0)};
  }
  float* mutable_data();
  /// Says that the values will hardly be read again: memory that mirrors a file goes back to the
  /// system until they are, all other stays. Safe beside readers in other threads.
  void release() const;
  /// The same values under another shape of as many elements; throws Error(kInput) otherwise.
  Tensor reshaped(Shape shape) const;

 private:
  Shape shape_{0};
  std::shared_ptr<const void> owner_;
  std::shared_ptr<std::vector<float>> own_;
  const float* data_ = nullptr;
  Release release_ = nullptr;
};

/// An activation in memory. Images (rank 4) are stored N, H, W, C; every other rank in logical
/// order. So the channels of one position always lie side by side, and [N, C, H, W] images,
/// [N, H*W, C] tokens and a row-major (positions x channels) matrix are the same bytes.
struct TensorView {
  float* data = nullptr;
  Shape shape{0};
};
struct ConstTensorView {
  const float* data = nullptr;
  Shape shape{0};

  ConstTensorView() = default;
  ConstTensorView(const float* d, const Shape& s) : data(d), shape(s) {}
  ConstTensorView(const TensorView& view) : data(view.data), shape(view.shape) {}  // NOLINT
};

/// Copies between memory order and logical order. Both sides hold shape.elements() floats.
void copy_to_logical(const ConstTensorView& from, float* to);
void copy_from_logical(const float* from, const TensorView& to);
Tensor to_tensor(const ConstTensorView& view);

}  // namespace leadsman
