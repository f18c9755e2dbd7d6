#include "leadsman/attributes.h"

#include <functional>

#include <gtest/gtest.h>

#include "leadsman/error.h"

namespace leadsman {
namespace {

std::string message_of(const std::function<void()>& read) {
  try {
    read();
    return "nothing thrown";
  } catch (const Error& error) {
    EXPECT_EQ(error.kind(), ErrorKind::kInput);
    return error.what();
  }
}

TEST(Attributes, GiveBackWhatWasSet) {
  Attributes a;
  a.set("keep", true);
  a.set("index", std::int64_t{-3});
  a.set("eps", 1e-6);
  a.set("kind", std::string("relu"));
  a.set("stride", std::vector<std::int64_t>{2, 1});
  EXPECT_TRUE(a.flag("keep"));
  EXPECT_EQ(a.integer("index"), -3);
  EXPECT_EQ(a.number("eps"), 1e-6);
  EXPECT_EQ(a.text("kind"), "relu");
  EXPECT_EQ(a.integers("stride"), (std::vector<std::int64_t>{2, 1}));
  EXPECT_EQ(a.values().size(), 5U);
  EXPECT_TRUE(a.has("eps"));
  EXPECT_FALSE(a.has("Eps"));
}

TEST(Attributes, TheLastValueCounts) {
  Attributes a;
  a.set("index", std::int64_t{1});
  a.set("index", std::int64_t{2});
  EXPECT_EQ(a.integer("index"), 2);
  EXPECT_EQ(a.values().size(), 1U);
}

TEST(Attributes, NameWhatIsMissingOrOfAnotherType) {
  Attributes a;
  a.set("index", std::int64_t{1});
  EXPECT_EQ(message_of([&] { a.integer("indices"); }), "indices: missing");
  EXPECT_EQ(message_of([&] { a.flag("index"); }), "index: is not true or false");
  EXPECT_EQ(message_of([&] { a.number("index"); }), "index: is not a number");
  EXPECT_EQ(message_of([&] { a.text("index"); }), "index: is not a text");
  EXPECT_EQ(message_of([&] { a.integers("index"); }), "index: is not a list of integers");
  a.set("eps", 1.0);
  EXPECT_EQ(message_of([&] { a.integer("eps"); }), "eps: is not an integer");
}

}  // namespace
}  // namespace leadsman
