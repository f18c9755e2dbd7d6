#include "leadsman/tensor.h"

#include <numeric>

#include <gtest/gtest.h>

#include "leadsman/error.h"

namespace leadsman {
namespace {

std::vector<float> counting(std::int64_t count) {
  std::vector<float> values(static_cast<std::size_t>(count));
  std::iota(values.begin(), values.end(), 0.0F);
  return values;
}

TEST(Tensor, BeginsAsZeros) {
  const Tensor tensor(Shape{2, 3});
  ASSERT_EQ(tensor.values().size(), 6U);
  for (const float value : tensor.values()) EXPECT_EQ(value, 0.0F);
}

TEST(Tensor, DefaultIsEmpty) {
  const Tensor tensor;
  EXPECT_EQ(tensor.elements(), 0);
  EXPECT_EQ(tensor.data(), nullptr);
  EXPECT_TRUE(tensor.values().empty());
}

TEST(Tensor, RefusesAnotherNumberOfValues) {
  try {
    Tensor(Shape{2, 3}, counting(5));
    FAIL() << "accepted";
  } catch (const Error& error) {
    EXPECT_EQ(error.kind(), ErrorKind::kInput);
    EXPECT_STREQ(error.what(), "5 values for a tensor of shape [2, 3]");
  }
}

TEST(Tensor, CopiesShareUntilOneIsWritten) {
  Tensor first(Shape{4}, counting(4));
  Tensor second = first;
  EXPECT_EQ(first.data(), second.data());
  second.mutable_data()[1] = 9.0F;
  EXPECT_NE(first.data(), second.data());
  EXPECT_EQ(first.data()[1], 1.0F);
  EXPECT_EQ(second.data()[1], 9.0F);
  EXPECT_EQ(second.data()[3], 3.0F);
}

TEST(Tensor, ASoleOwnerIsNotCopied) {
  Tensor tensor(Shape{4}, counting(4));
  const float* before = tensor.data();
  EXPECT_EQ(tensor.mutable_data(), before);
  { const Tensor other = tensor; }
  EXPECT_EQ(tensor.mutable_data(), before);
}

TEST(Tensor, WritingToTheOriginalLeavesTheCopy) {
  Tensor first(Shape{4}, counting(4));
  const Tensor second = first;
  first.mutable_data()[0] = 7.0F;
  EXPECT_EQ(second.data()[0], 0.0F);
}

TEST(Tensor, KeepsBorrowedMemoryAliveAndUnchanged) {
  auto owner = std::make_shared<std::vector<float>>(counting(6));
  const std::weak_ptr<std::vector<float>> watch = owner;
  const float* memory = owner->data();
  Tensor tensor = Tensor::borrow(Shape{2, 3}, memory, owner);
  owner.reset();
  EXPECT_FALSE(watch.expired());
  EXPECT_EQ(tensor.data(), memory);

  const Tensor reader = tensor;
  tensor.mutable_data()[5] = -1.0F;
  EXPECT_NE(tensor.data(), memory);
  EXPECT_EQ(reader.data()[5], 5.0F);
  EXPECT_EQ(tensor.data()[4], 4.0F);
}

TEST(Tensor, LetsBorrowedMemoryGo) {
  auto owner = std::make_shared<std::vector<float>>(counting(6));
  const std::weak_ptr<std::vector<float>> watch = owner;
  Tensor tensor = Tensor::borrow(Shape{6}, owner->data(), owner);
  owner.reset();
  tensor.mutable_data();
  EXPECT_TRUE(watch.expired());
}

TEST(Tensor, ReleasesBorrowedMemoryAlone) {
  static const void* released = nullptr;
  static std::size_t bytes = 0;
  const auto note = [](const void* data, std::size_t count) {
    released = data;
    bytes = count;
  };
  const std::vector<float> memory = counting(6);
  Tensor tensor = Tensor::borrow(Shape{6}, memory.data(), nullptr, note);
  tensor.release();
  EXPECT_EQ(released, memory.data());
  EXPECT_EQ(bytes, 24U);
  released = nullptr;
  tensor.mutable_data();  // a copy of its own
  tensor.release();
  Tensor(Shape{3}).release();
  EXPECT_EQ(released, nullptr);
}

TEST(Tensor, ReshapedSharesItsValues) {
  const Tensor tensor(Shape{2, 6}, counting(12));
  const Tensor other = tensor.reshaped({3, 4});
  EXPECT_EQ(other.shape(), (Shape{3, 4}));
  EXPECT_EQ(other.data(), tensor.data());
  try {
    tensor.reshaped({5});
    FAIL() << "accepted";
  } catch (const Error& error) {
    EXPECT_STREQ(error.what(), "a tensor of shape [2, 6] cannot be viewed as [5]");
  }
}

// Logical index (n, c, h, w) lies at ((n * H + h) * W + w) * C + c.
TEST(MemoryOrder, ImagesHaveTheirChannelsSideBySide) {
  const Shape shape{2, 3, 4, 5};
  const std::vector<float> logical = counting(shape.elements());
  std::vector<float> memory(logical.size(), -1.0F);
  copy_from_logical(logical.data(), {memory.data(), shape});
  for (std::int64_t n = 0; n < 2; ++n) {
    for (std::int64_t c = 0; c < 3; ++c) {
      for (std::int64_t h = 0; h < 4; ++h) {
        for (std::int64_t w = 0; w < 5; ++w) {
          const std::int64_t in_memory = ((n * 4 + h) * 5 + w) * 3 + c;
          const std::int64_t in_logic = ((n * 3 + c) * 4 + h) * 5 + w;
          ASSERT_EQ(memory[static_cast<std::size_t>(in_memory)], static_cast<float>(in_logic));
        }
      }
    }
  }
}

TEST(MemoryOrder, ComesBackUnchangedAtEveryRank) {
  for (const Shape& shape :
       {Shape{2, 3, 4, 5}, Shape{1, 1, 2, 3}, Shape{2, 7, 1, 1}, Shape{3, 4, 5}, Shape{6, 2},
        Shape{5}, Shape{2, 1, 2, 1, 3}, Shape{0, 3, 2, 2}}) {
    SCOPED_TRACE(shape.to_string());
    const std::vector<float> logical = counting(shape.elements());
    std::vector<float> memory(logical.size());
    copy_from_logical(logical.data(), {memory.data(), shape});
    if (shape.rank() != 4) {
      EXPECT_EQ(memory, logical);
    }
    std::vector<float> back(logical.size());
    copy_to_logical({memory.data(), shape}, back.data());
    EXPECT_EQ(back, logical);
    const Tensor tensor = to_tensor({memory.data(), shape});
    EXPECT_EQ(tensor.shape(), shape);
    EXPECT_EQ(std::vector<float>(tensor.values().begin(), tensor.values().end()), logical);
  }
}

}  // namespace
}  // namespace leadsman
