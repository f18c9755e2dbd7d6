#include "leadsman/tensor.h"

#include <algorithm>
#include <cassert>

#include "leadsman/error.h"

namespace leadsman {

Tensor::Tensor(Shape shape)
    : shape_(shape),
      own_(std::make_shared<std::vector<float>>(static_cast<std::size_t>(shape.elements()))) {
  data_ = own_->data();
}

Tensor::Tensor(Shape shape, std::vector<float> values) : shape_(shape) {
  if (static_cast<std::int64_t>(values.size()) != shape.elements()) {
    throw_input(std::to_string(values.size()) + " values for a tensor of shape " +
                shape.to_string());
  }
  own_ = std::make_shared<std::vector<float>>(std::move(values));
  data_ = own_->data();
}

Tensor Tensor::borrow(Shape shape, const float* data, std::shared_ptr<const void> owner,
                      Release release) {
  Tensor tensor;
  tensor.shape_ = shape;
  tensor.data_ = data;
  tensor.owner_ = std::move(owner);
  tensor.release_ = release;
  return tensor;
}

void Tensor::release() const {
  if (release_ != nullptr) release_(data_, static_cast<std::size_t>(elements()) * sizeof(float));
}

float* Tensor::mutable_data() {
  if (own_ == nullptr || own_.use_count() > 1) {
    const std::span<const float> old = values();
    own_ = std::make_shared<std::vector<float>>(old.begin(), old.end());
    owner_.reset();
    release_ = nullptr;
    data_ = own_->data();
  }
  return own_->data();
}

Tensor Tensor::reshaped(Shape shape) const {
  if (shape.elements() != elements()) {
    throw_input("a tensor of shape " + shape_.to_string() + " cannot be viewed as " +
                shape.to_string());
  }
  Tensor other = *this;
  other.shape_ = shape;
  return other;
}

void copy_to_logical(const ConstTensorView& from, float* to) {
  if (from.shape.rank() != 4) {
    std::copy_n(from.data, from.shape.elements(), to);
    return;
  }
  const std::int64_t channels = from.shape[1];
  const std::int64_t area = from.shape[2] * from.shape[3];
  for (std::int64_t n = 0; n < from.shape[0]; ++n) {
    const float* image = from.data + n * channels * area;
    float* planes = to + n * channels * area;
    for (std::int64_t i = 0; i < area; ++i) {
      for (std::int64_t c = 0; c < channels; ++c) planes[c * area + i] = image[i * channels + c];
    }
  }
}

void copy_from_logical(const float* from, const TensorView& to) {
  if (to.shape.rank() != 4) {
    std::copy_n(from, to.shape.elements(), to.data);
    return;
  }
  const std::int64_t channels = to.shape[1];
  const std::int64_t area = to.shape[2] * to.shape[3];
  for (std::int64_t n = 0; n < to.shape[0]; ++n) {
    const float* planes = from + n * channels * area;
    float* image = to.data + n * channels * area;
    for (std::int64_t i = 0; i < area; ++i) {
      for (std::int64_t c = 0; c < channels; ++c) image[i * channels + c] = planes[c * area + i];
    }
  }
}

Tensor to_tensor(const ConstTensorView& view) {
  Tensor tensor(view.shape);
  copy_to_logical(view, tensor.mutable_data());
  return tensor;
}

}  // namespace leadsman
