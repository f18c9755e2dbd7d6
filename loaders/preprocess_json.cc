#include "loaders/preprocess_json.h"

#include <array>
#include <string_view>
#include <utility>

#include "leadsman/error.h"
#include "loaders/text.h"

namespace leadsman::loaders {
namespace {

template <typename T, std::size_t count>
using Words = std::array<std::pair<std::string_view, T>, count>;

constexpr Words<Interpolation, 3> kInterpolations = {{{"nearest", Interpolation::kNearest},
                                                      {"bilinear", Interpolation::kBilinear},
                                                      {"bicubic", Interpolation::kBicubic}}};
constexpr Words<Channels, 3> kChannels = {
    {{"RGB", Channels::kRgb}, {"BGR", Channels::kBgr}, {"GREY", Channels::kGrey}}};
constexpr Words<Orientation, 2> kOrientations = {
    {{"as_stored", Orientation::kAsStored}, {"exif", Orientation::kExif}}};

template <typename T, std::size_t count>
T parse_word(const JsonCursor& value, const std::string& what, const Words<T, count>& words) {
  const std::string text = value.text(what);
  std::vector<std::string> known;
  for (const auto& [word, meaning] : words) {
    if (word == text) return meaning;
    known.emplace_back(word);
  }
  value.fail_unknown(in_quotes(text) + " is not known", text, known);
}

template <typename T, std::size_t count>
std::string word_for(T meaning, const Words<T, count>& words) {
  for (const auto& [word, each] : words) {
    if (each == meaning) return json_quoted(word);
  }
  return "null";
}

PictureSize parse_size(const JsonCursor& value) {
  const std::vector<JsonCursor> sides = value.items("a list [height, width]", 2);
  return {sides[0].size("a height of 1 or more"), sides[1].size("a width of 1 or more")};
}

std::vector<double> parse_numbers(const JsonCursor& value) {
  const char* const what = "a list with a number for each channel";
  std::vector<double> numbers;
  for (const JsonCursor& item : value.items(what)) numbers.push_back(item.number("a number"));
  if (numbers.empty()) value.fail_type(what);
  return numbers;
}

std::vector<double> parse_deviations(const JsonCursor& value) {
  std::vector<double> numbers = parse_numbers(value);
  for (std::size_t i = 0; i < numbers.size(); ++i) {
    if (numbers[i] <= 0) value.fail("number " + std::to_string(i) + " is not above 0");
  }
  return numbers;
}

void parse_resize(const JsonCursor& value, Preprocess& preprocess) {
  value.expect_object({"shorter_side", "exact", "interpolation"});
  if (value.has("shorter_side") == value.has("exact")) {
    value.fail("either 'shorter_side' or 'exact' is wanted");
  }
  if (value.has("shorter_side")) {
    preprocess.shorter_side = value.member("shorter_side").size("a size of 1 or more");
  } else {
    preprocess.exact = parse_size(value.member("exact"));
  }
  if (value.has("interpolation")) {
    preprocess.interpolation =
        parse_word(value.member("interpolation"), "an interpolation", kInterpolations);
  }
}

std::string size_text(const PictureSize& size) {
  return "[" + std::to_string(size.height) + ", " + std::to_string(size.width) + "]";
}

std::string numbers_text(const std::vector<double>& numbers) {
  std::string text = "[";
  for (const double number : numbers) text += (text.size() > 1 ? ", " : "") + Json(number).dump();
  return text + "]";
}

}  // namespace

Preprocess parse_preprocess(const JsonCursor& section) {
  section.expect_object({"resize", "crop", "channels", "orientation", "scale", "mean", "std"});
  Preprocess preprocess;
  if (section.has("resize")) parse_resize(section.member("resize"), preprocess);
  if (section.has("crop")) preprocess.crop = parse_size(section.member("crop"));
  if (section.has("channels")) {
    preprocess.channels = parse_word(section.member("channels"), "a channel order", kChannels);
  }
  if (section.has("orientation")) {
    preprocess.orientation =
        parse_word(section.member("orientation"), "an orientation", kOrientations);
  }
  if (section.has("scale")) preprocess.scale = section.member("scale").number("a number");
  if (section.has("mean")) preprocess.mean = parse_numbers(section.member("mean"));
  if (section.has("std")) preprocess.stddev = parse_deviations(section.member("std"));
  try {
    check_preprocess(preprocess);
  } catch (const Error& error) {
    section.fail(error.what());
  }
  return preprocess;
}

std::string preprocess_text(const Preprocess& preprocess) {
  std::string text = "{";
  const auto add = [&text](const std::string& key, const std::string& value) {
    text += (text.size() > 1 ? ", " : "") + json_quoted(key) + ": " + value;
  };
  if (preprocess.shorter_side > 0 || preprocess.exact) {
    const std::string size = preprocess.exact
                                 ? "\"exact\": " + size_text(*preprocess.exact)
                                 : "\"shorter_side\": " + std::to_string(preprocess.shorter_side);
    add("resize", "{" + size + ", \"interpolation\": " +
                      word_for(preprocess.interpolation, kInterpolations) + "}");
  }
  if (preprocess.crop) add("crop", size_text(*preprocess.crop));
  add("channels", word_for(preprocess.channels, kChannels));
  add("orientation", word_for(preprocess.orientation, kOrientations));
  add("scale", Json(preprocess.scale).dump());
  if (!preprocess.mean.empty()) add("mean", numbers_text(preprocess.mean));
  if (!preprocess.stddev.empty()) add("std", numbers_text(preprocess.stddev));
  return text + "}";
}

}  // namespace leadsman::loaders
