#include "loaders/finite.h"

#include <cmath>
#include <limits>
#include <vector>

#include <gtest/gtest.h>

namespace leadsman::loaders {
namespace {

constexpr float kNan = std::numeric_limits<float>::quiet_NaN();
constexpr float kInfinity = std::numeric_limits<float>::infinity();

TEST(FindNonFinite, SeesEveryKindAtEveryPlace) {
  std::vector<float> values(4096 * 2 + 5, 1.0f);
  values[7] = std::numeric_limits<float>::max();
  values[8] = std::numeric_limits<float>::lowest();
  values[9] = std::numeric_limits<float>::denorm_min();
  values[10] = -0.0f;
  EXPECT_EQ(find_non_finite(values), -1);
  EXPECT_EQ(find_non_finite(std::span<const float>()), -1);
  for (const std::size_t at : {0u, 1u, 4095u, 4096u, 8191u, 8192u, 8196u}) {
    for (const float bad :
         {kNan, -kNan, kInfinity, -kInfinity, std::numeric_limits<float>::signaling_NaN()}) {
      std::vector<float> broken = values;
      broken[at] = bad;
      broken.back() = kNan;
      EXPECT_EQ(find_non_finite(broken), static_cast<std::int64_t>(at));
    }
  }
}

TEST(FindNonFinite, NamesTheFirstWhateverTheThreads) {
  Tensor whole(Shape{1000, 1000});
  Tensor broken = whole;
  broken.mutable_data()[900'001] = kNan;
  broken.mutable_data()[700'002] = kInfinity;
  for (const int threads : {1, 2, 3, 8}) {
    const NonFinite found = find_non_finite({&whole, &broken, &broken}, threads);
    EXPECT_EQ(found.tensor, 1u);
    EXPECT_EQ(found.index, 700'002);
    EXPECT_EQ(find_non_finite({&whole}, threads).index, -1);
  }
  EXPECT_EQ(find_non_finite(std::vector<const Tensor*>(), 2).index, -1);
  EXPECT_EQ(index_text(broken.shape(), 700'002), "[700, 2]");
  EXPECT_EQ(index_text(Shape{}, 0), "[]");
  EXPECT_EQ(index_text(Shape{2, 3, 4}, 23), "[1, 2, 3]");
}

}  // namespace
}  // namespace leadsman::loaders
