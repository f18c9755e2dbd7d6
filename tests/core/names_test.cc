#include "leadsman/names.h"

#include <gtest/gtest.h>

namespace leadsman {
namespace {

struct Match {
  const char* pattern;
  const char* name;
  bool matches;
};

class Glob : public ::testing::TestWithParam<Match> {};

TEST_P(Glob, Matches) {
  const Match& m = GetParam();
  EXPECT_EQ(matches_glob(m.pattern, m.name), m.matches) << m.pattern << " against " << m.name;
}

INSTANTIATE_TEST_SUITE_P(
    Patterns, Glob,
    ::testing::Values(
        Match{"conv1", "conv1", true}, Match{"conv1", "conv", false}, Match{"conv", "conv1", false},
        Match{"", "", true}, Match{"", "a", false}, Match{"*", "", true}, Match{"*", "a.b.c", true},
        Match{"**", "abc", true}, Match{"?", "", false}, Match{"?", "a", true},
        Match{"?", "ab", false}, Match{"layer*.conv?", "layer1.0.conv2", true},
        Match{"layer*.conv?", "layer1.0.conv", false}, Match{"*.relu", "layer1.relu", true},
        Match{"*.relu", "layer1.relu2", false}, Match{"*a*b", "xaxbxab", true},
        Match{"*a*b", "xaxbxa", false}, Match{"a*", "ba", false}, Match{"*ab", "aab", true},
        Match{"a.c", "abc", false}, Match{"[a]", "a", false}, Match{"\\*", "*", false},
        Match{"a*b*c", "a*b*c", true}, Match{"*?", "", false}, Match{"*?", "ab", true}));

// A matcher that tries every split of the name takes hours here.
TEST(Glob, StaysFastOnHostilePatterns) {
  std::string pattern;
  for (int i = 0; i < 40; ++i) pattern += "*a";
  EXPECT_FALSE(matches_glob(pattern + "b", std::string(5000, 'a')));
}

TEST(NearestName, NeedsTheFewestEdits) {
  const std::vector<std::string> names{"layer1.0.conv1", "layer1.0.conv2", "fc", "avgpool"};
  EXPECT_EQ(nearest_name("layer1.0.conv", names), "layer1.0.conv1");  // the first of two
  EXPECT_EQ(nearest_name("layer1.0.conv22", names), "layer1.0.conv2");
  EXPECT_EQ(nearest_name("avg_pool", names), "avgpool");
  EXPECT_EQ(nearest_name("fc", names), "fc");
  EXPECT_EQ(nearest_name("cf", names), "");  // two edits of two letters
}

TEST(NearestName, IsEmptyWhenNothingIsNear) {
  EXPECT_EQ(nearest_name("softmax", {"fc", "conv1"}), "");
  EXPECT_EQ(nearest_name("abcd", {"abxy"}), "abxy");  // half of its letters
  EXPECT_EQ(nearest_name("abcd", {"axyz"}), "");
  EXPECT_EQ(nearest_name("x", {}), "");
}

TEST(NearestName, PassesOverNamesTooLongToCompare) {
  const std::string longest(100000, 'a');
  EXPECT_EQ(nearest_name(longest, {longest}), "");
  EXPECT_EQ(nearest_name("conv", {longest, "conv1"}), "conv1");
}

}  // namespace
}  // namespace leadsman
