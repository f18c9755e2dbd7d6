#include "ops/simd/target.h"

#include <algorithm>

#include <gtest/gtest.h>

#include "leadsman/error.h"

namespace leadsman::ops::simd {
namespace {

TEST(Target, EachSupportedOneCanBeForced) {
  const std::string before(target_in_use());
  ASSERT_FALSE(supported_targets().empty());
  for (const std::string& name : supported_targets()) {
    const ForcedTarget forced(name);
    EXPECT_EQ(target_in_use(), name);
  }
  EXPECT_EQ(target_in_use(), before);
}

TEST(Target, UnknownNameIsAUsageErrorThatListsTheSupportedOnes) {
  try {
    force_target("mmx");
    FAIL() << "no error";
  } catch (const Error& error) {
    EXPECT_EQ(error.kind(), ErrorKind::kUsage);
    for (const std::string& name : supported_targets()) {
      EXPECT_NE(std::string(error.what()).find(name), std::string::npos) << error.what();
    }
  }
}

TEST(Target, ANameOfAnotherArchitectureIsRefused) {
  for (const char* name : {"neon", "avx2"}) {
    const auto known = supported_targets();
    if (std::find(known.begin(), known.end(), name) == known.end()) {
      EXPECT_THROW(force_target(name), Error);
    }
  }
}

}  // namespace
}  // namespace leadsman::ops::simd
