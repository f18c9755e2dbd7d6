#include "core/aligned_memory.h"

#include <algorithm>
#include <cstdint>
#include <limits>

#include <gtest/gtest.h>

namespace leadsman {
namespace {

TEST(AlignedMemory, BeginsAtACacheLineAndLargeBlocksAtAHugePage) {
  for (const std::size_t bytes : {0U, 1U, 64U, 100000U, 5000000U}) {
    const auto memory = allocate_aligned(bytes);
    ASSERT_NE(memory, nullptr) << bytes;
    const std::size_t wanted = bytes < 4000000U ? kAlignment : std::size_t{1} << 21;
    EXPECT_EQ(reinterpret_cast<std::uintptr_t>(memory.get()) % wanted, 0U) << bytes;
    std::fill_n(memory.get(), bytes, std::byte{1});  // all of it is there
  }
}

TEST(AlignedMemory, IsNullWhereThereIsNone) {
  EXPECT_EQ(allocate_aligned(std::numeric_limits<std::size_t>::max() / 4), nullptr);
}

}  // namespace
}  // namespace leadsman
