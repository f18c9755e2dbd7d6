#include "ops/simd/target.h"

#include <algorithm>
#include <cstdio>
#include <cstdlib>
#include <string>

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

// The variable is read once, so each case is a process of its own: forked off before any other
// test (death tests run first), as emulators cannot execute a test anew.
void choose_with(const char* name) {
  setenv("LEADSMAN_SIMD", name, 1);
  try {
    choose_target();
  } catch (const Error& error) {
    std::fprintf(stderr, "%s", error.what());
    std::exit(static_cast<int>(error.kind()));
  }
  std::fprintf(stderr, "uses %s", std::string(target_in_use()).c_str());
  std::exit(0);
}

TEST(TargetDeathTest, TheEnvironmentVariableSelectsIt) {
  for (const std::string& name : supported_targets()) {
    EXPECT_EXIT(choose_with(name.c_str()), ::testing::ExitedWithCode(0), "uses " + name);
  }
  EXPECT_EXIT(choose_with(""), ::testing::ExitedWithCode(0), "uses " + supported_targets()[0]);
  EXPECT_EXIT(choose_with("mmx"), ::testing::ExitedWithCode(2), "LEADSMAN_SIMD: mmx is no");
}

}  // namespace
}  // namespace leadsman::ops::simd
