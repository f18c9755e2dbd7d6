#include "leadsman/compare_picture.h"

#include <algorithm>
#include <cmath>
#include <filesystem>
#include <map>

#include <gtest/gtest.h>

#include "leadsman/bundle.h"
#include "leadsman/runner.h"
#include "tests/support/files.h"
#include "tests/support/graph_builder.h"
#include "tests/support/reference_stages.h"

namespace leadsman {
namespace {

using testing::decoded_otherwise;
using testing::levels_of;
using testing::Random;
using testing::stages_of;

class ComparePicture : public ::testing::Test {
 protected:
  ComparePicture() : net_(testing::small_conv_net()) {
    settings_.shorter_side = 28;
    settings_.crop = PictureSize{24, 20};
    settings_.mean = {0.4, 0.5, 0.6};
    settings_.stddev = {0.2, 0.25, 0.3};
    Random random(7);
    picture_ = {61, 47, {}};
    for (int i = 0; i < 61 * 47 * 3; ++i) {
      picture_.rgb.push_back(static_cast<std::uint8_t>(random.integer(0, 255)));
    }
    reference_ = stages_of(picture_, settings_, "image");
  }

  PictureComparison compare(int decoder_levels = 0) const {
    PictureCompareOptions options;
    options.decoder_levels = decoder_levels;
    return compare_picture(
        picture_, settings_, net_.graph(), net_.weights(),
        [&](const std::string& name) -> std::optional<Tensor> {
          const auto found = reference_.find(name);
          return found == reference_.end() ? std::nullopt : std::optional(found->second);
        },
        options);
  }

  testing::GraphBuilder net_;
  Preprocess settings_;
  Picture picture_;
  std::map<std::string, Tensor> reference_;
};

TEST_F(ComparePicture, FindsNothingWhereNothingDiffers) {
  const PictureComparison found = compare();
  ASSERT_EQ(found.stages.size(), 4u);
  const char* const names[] = {"decoded", "resized", "cropped", "normalised"};
  for (std::size_t i = 0; i < 4; ++i) {
    EXPECT_EQ(found.stages[i].stage, names[i]);
    EXPECT_EQ(found.stages[i].chained.largest, 0.0);
    EXPECT_EQ(found.stages[i].isolated.largest, 0.0);
    EXPECT_EQ(found.stages[i].isolated.share, 0.0);
    EXPECT_FALSE(found.stages[i].departs);
  }
  EXPECT_EQ(found.first_departure, "");
  EXPECT_FALSE(found.only_decoder_differs);
  EXPECT_EQ(found.output_relative_l2, 0.0);
  EXPECT_EQ(found.our_top, found.reference_top);
}

TEST_F(ComparePicture, SaysWhenOnlyTheDecoderDiffers) {
  Random random(3);
  reference_ = stages_of(decoded_otherwise(picture_, 1, 0.5, random), settings_, "image");
  const PictureComparison found = compare(/*decoder_levels=*/1);
  EXPECT_TRUE(found.only_decoder_differs);
  EXPECT_EQ(found.first_departure, "");
  EXPECT_EQ(found.stages[0].isolated.largest, 1.0);
  EXPECT_NEAR(found.stages[0].isolated.share, 0.5, 0.05);
  EXPECT_EQ(found.stages[1].isolated.largest, 0.0);
  EXPECT_GE(found.stages[1].chained.largest, 1.0);
  EXPECT_EQ(found.stages[3].isolated.largest, 0.0);
  // A level is a level in the normalised input, too.
  EXPECT_NEAR(found.stages[3].chained.largest, found.stages[2].chained.largest, 1e-3);
  EXPECT_GT(found.input_relative_l2, 0.0);
  EXPECT_GT(found.output_relative_l2, 0.0);

  EXPECT_EQ(compare(/*decoder_levels=*/0).first_departure, "decoded");
  EXPECT_FALSE(compare(/*decoder_levels=*/0).only_decoder_differs);
}

TEST_F(ComparePicture, TheMovementOfTheOutputIsThatOfTwoRuns) {
  Random random(4);
  const Picture other = decoded_otherwise(picture_, 2, 1.0, random);
  reference_ = stages_of(other, settings_, "image");
  PlanOptions plan;
  plan.input_shapes = {Shape{1, 3, 24, 20}};
  Runner runner(Plan::make(net_.graph(), net_.weights(), plan));
  std::vector<Tensor> outputs;
  for (const Picture& each : {picture_, other}) {
    runner.run(preprocess(each, settings_));
    outputs.push_back(to_tensor(runner.output()));
  }
  EXPECT_EQ(compare(2).output_relative_l2, measure_difference(outputs[0], outputs[1]).relative_l2);
}

// The mistake that is made most: a resize without antialiasing.
TEST_F(ComparePicture, NamesAResizeOfAnotherKindWhateverTheDecoder) {
  for (const int levels : {0, 2}) {
    Random random(5);
    const Picture decoded = decoded_otherwise(picture_, levels, 0.1, random);
    Preprocess other = settings_;
    other.interpolation = Interpolation::kNearest;
    reference_ = stages_of(decoded, other, "image");
    const PictureComparison found = compare(2);
    EXPECT_EQ(found.first_departure, "resized");
    EXPECT_FALSE(found.only_decoder_differs);
    EXPECT_GT(found.stages[1].isolated.largest, 10.0);
    EXPECT_FALSE(found.stages[2].departs);
    EXPECT_FALSE(found.stages[3].departs);
    EXPECT_GT(found.output_relative_l2, 1e-3);
  }
}

TEST_F(ComparePicture, NamesTheStageWhoseSizeDiffers) {
  Preprocess other = settings_;
  other.shorter_side = 30;
  reference_ = stages_of(picture_, other, "image");
  PictureComparison found = compare();
  EXPECT_EQ(found.first_departure, "resized");
  EXPECT_EQ(found.stages[1].remark, "28x36 instead of 30x38");
  EXPECT_TRUE(std::isinf(found.stages[1].isolated.largest));

  other = settings_;
  other.crop = PictureSize{20, 24};
  reference_ = stages_of(picture_, other, "image");
  found = compare();
  EXPECT_EQ(found.first_departure, "cropped");
  EXPECT_TRUE(found.stages[3].departs == false && std::isinf(found.stages[3].chained.largest));
  EXPECT_TRUE(std::isinf(found.output_relative_l2));

  picture_.height = 46;
  picture_.rgb.resize(61 * 46 * 3);
  found = compare();
  EXPECT_EQ(found.first_departure, "decoded");
  EXPECT_EQ(found.stages[0].remark, "46x61 instead of 47x61");
}

TEST_F(ComparePicture, NamesNormalisationButNotItsRounding) {
  const Tensor right = reference_["image"];
  Tensor& image = reference_["image"];
  // In double, rounded once, as NumPy would: a rounding or two from ours.
  const Tensor levels = reference_["preprocess:cropped"];
  bool rounded = false;
  for (std::int64_t i = 0; i < image.elements(); ++i) {
    const auto c = static_cast<std::size_t>(i / (24 * 20));
    const double exact =
        (static_cast<double>(levels.data()[i]) / 255.0 - settings_.mean[c]) / settings_.stddev[c];
    image.mutable_data()[i] = static_cast<float>(exact);
    rounded = rounded || image.data()[i] != right.data()[i];
  }
  EXPECT_TRUE(rounded);
  EXPECT_EQ(compare().first_departure, "");
  EXPECT_GT(compare().stages[3].isolated.largest, 0.0);
  EXPECT_LT(compare().stages[3].allowed, 1e-3);

  Preprocess other = settings_;
  std::swap(other.mean[0], other.mean[2]);
  reference_ = stages_of(picture_, other, "image");
  EXPECT_EQ(compare().first_departure, "normalised");
  EXPECT_NEAR(compare().stages[3].isolated.largest, 0.2 * 255.0, 0.1);

  reference_["image"] = right;
  reference_["image"].mutable_data()[5] = std::nanf("");
  EXPECT_EQ(compare().first_departure, "normalised");
  EXPECT_TRUE(std::isinf(compare().stages[3].isolated.largest));
}

TEST_F(ComparePicture, RefusesAReferenceWithoutStages) {
  const std::map<std::string, Tensor> whole = reference_;
  for (const char* name : {"preprocess:decoded", "preprocess:resized", "preprocess:cropped"}) {
    reference_.erase(name);
    const std::string said = testing::input_error([&] { compare(); });
    EXPECT_NE(said.find(name), std::string::npos) << said;
    EXPECT_NE(said.find("--picture"), std::string::npos) << said;
    reference_[name] = Tensor({1, 4, 5, 5});
    EXPECT_NE(testing::input_error([&] { compare(); }).find("shape [1, 4, 5, 5]"),
              std::string::npos);
    for (const float value : {0.5f, -1.0f, 256.0f, std::nanf("")}) {
      reference_ = whole;
      reference_[name].mutable_data()[3] = value;
      EXPECT_NE(testing::input_error([&] { compare(); }).find("not a level"), std::string::npos);
    }
    reference_ = whole;
  }
}

// loaders/GRAPH_FORMAT.md states these figures, of pictures whose every value is off.
TEST(DecoderLevels, MoveTheShippedModelsLittle) {
  const std::string buttons = std::string(LEADSMAN_SOURCE_DIR) + "/examples/buttons";
  std::vector<std::filesystem::path> files;
  for (const std::string folder : {"ordinary", "odd"}) {
    for (const auto& entry : std::filesystem::directory_iterator(buttons + "/pictures/" + folder)) {
      files.push_back(entry.path());
    }
  }
  std::ranges::sort(files);
  ASSERT_EQ(files.size(), 104u);
  struct Stated {
    std::string name;
    int levels;
    double median;
    double largest;
    int changed;
  };
  for (const auto& [name, levels, median, largest, most_changed] :
       {Stated{"conv", 1, 0.014, 0.13, 0}, Stated{"conv", 2, 0.022, 0.20, 0},
        Stated{"vit", 1, 0.0035, 0.04, 0}, Stated{"vit", 2, 0.006, 0.07, 1}}) {
    const Bundle bundle = load_bundle(buttons + "/bundles/" + name);
    Random random(11);
    std::vector<double> moved;
    int changed = 0;
    for (const auto& file : files) {
      const Picture picture = read_picture(file);
      const std::map<std::string, Tensor> reference =
          stages_of(decoded_otherwise(picture, levels, 1.0, random), *bundle.preprocess, "image");
      PictureCompareOptions options;
      options.decoder_levels = levels;
      const PictureComparison found = compare_picture(
          picture, *bundle.preprocess, bundle.graph, bundle.weights,
          [&](const std::string& tensor) { return std::optional(reference.at(tensor)); }, options);
      ASSERT_TRUE(found.only_decoder_differs) << file;
      moved.push_back(found.output_relative_l2);
      changed += found.our_top != found.reference_top ? 1 : 0;
    }
    std::ranges::sort(moved);
    SCOPED_TRACE(name + ", " + std::to_string(levels));
    EXPECT_LE(moved[moved.size() / 2], median);
    EXPECT_GE(moved[moved.size() / 2], 0.9 * median);  // stated, not just bounded
    EXPECT_LE(moved.back(), largest);
    EXPECT_LE(changed, most_changed);
  }
}

}  // namespace
}  // namespace leadsman
