// The built architectures against published figures; what they compute is compared with the
// reference library's in tests/conformance/test_import.py.
#include "leadsman/architectures.h"

#include <algorithm>
#include <cmath>
#include <set>

#include <gtest/gtest.h>

#include "leadsman/runner.h"
#include "tests/support/files.h"
#include "tests/support/random.h"

namespace leadsman {
namespace {

using testing::usage_error;

struct PublishedFigures {
  const char* name;
  std::int64_t parameters;
  double giga_macs;
};

// torchvision 0.16.2, the metadata of each architecture's first weights ("num_params", "_ops",
// whose unit is 1e9 multiply-adds).
constexpr PublishedFigures kTorchvision[] = {
    {"resnet18", 11689512, 1.814},          {"resnet34", 21797672, 3.664},
    {"resnet50", 25557032, 4.089},          {"resnet101", 44549160, 7.801},
    {"resnet152", 60192808, 11.514},        {"resnext50_32x4d", 25028904, 4.23},
    {"resnext101_32x8d", 88791336, 16.414}, {"resnext101_64x4d", 83455272, 15.46},
    {"wide_resnet50_2", 68883240, 11.398},  {"wide_resnet101_2", 126886696, 22.753},
    {"mobilenet_v2", 3504872, 0.301},       {"efficientnet_b0", 5288548, 0.386},
    {"convnext_tiny", 28589128, 4.456},     {"convnext_small", 50223688, 8.684},
    {"convnext_base", 88591464, 15.355},    {"convnext_large", 197767336, 34.361},
    {"vit_b_16", 86567656, 17.564},         {"vit_b_32", 88224232, 4.409},
    {"vit_l_16", 304326632, 61.555},        {"vit_l_32", 306535400, 15.378},
};

TEST(Architectures, ParametersAndMacsAreThoseOfTorchvisionsMetadata) {
  for (const PublishedFigures& published : kTorchvision) {
    const Architecture built = build_architecture(published.name);
    EXPECT_EQ(built.parameters, published.parameters) << published.name;
    EXPECT_NEAR(static_cast<double>(built.macs) / 1e9, published.giga_macs, 0.0005)
        << published.name;
  }
}

// Rounded as the papers round, to the last digit given: millions of parameters, billions of
// multiply-adds.
//   EfficientNet-B0: Tan & Le 2019, table 2. ResNeXt-50: Xie et al. 2017, table 1.
//   DeiT-Ti and -S: Wang et al. 2021 (PVT), table 2.
TEST(Architectures, ParametersAndMacsAreThoseOfThePapers) {
  struct PaperFigures {
    const char* name;
    double parameters, giga_macs, macs_unit;
  };
  constexpr PaperFigures kPapers[] = {
      {"efficientnet_b0", 5.3, 0.39, 0.01},
      {"resnext50_32x4d", 25.0, 4.2, 0.1},
      {"vit_ti_16", 5.7, 1.3, 0.1},
      {"vit_s_16", 22.1, 4.6, 0.1},
  };
  for (const PaperFigures& paper : kPapers) {
    const Architecture built = build_architecture(paper.name);
    EXPECT_NEAR(static_cast<double>(built.parameters) / 1e6, paper.parameters, 0.05) << paper.name;
    EXPECT_NEAR(static_cast<double>(built.macs) / 1e9, paper.giga_macs, 0.5 * paper.macs_unit)
        << paper.name;
  }
}

TEST(Architectures, NamesAreDistinctAndAllBuild) {
  const std::vector<std::string> names = architecture_names();
  EXPECT_EQ(std::set<std::string>(names.begin(), names.end()).size(), names.size());
  for (const std::string& name : names) {
    const Architecture built = build_architecture(name, {.classes = 7, .size = {96, 64}});
    EXPECT_EQ(built.graph.name, name);
    EXPECT_EQ(built.graph.inputs.front().usual_size, (std::vector<std::int64_t>{96, 64}));
    EXPECT_FALSE(built.source.empty());
    EXPECT_EQ(output_size(built.preprocess, {500, 700}).height, 96);
    EXPECT_EQ(output_size(built.preprocess, {500, 700}).width, 64);
  }
}

TEST(Architectures, WeightsAreThoseThatTheGraphNames) {
  for (const std::string& name : architecture_names()) {
    const Architecture built = build_architecture(name);
    std::set<std::string> named;
    for (const Layer& layer : built.graph.layers) {
      for (const auto& [role, tensor] : layer.weights) {
        EXPECT_TRUE(named.insert(tensor).second) << name << ": " << tensor << " is used twice";
      }
    }
    std::set<std::string> held;
    for (const auto& [tensor, weight] : built.weights) held.insert(tensor);
    EXPECT_EQ(named, held) << name;
  }
}

TEST(Architectures, AVisionTransformersPositionsFitTheLongerSide) {
  const Architecture built = build_architecture("vit_ti_16", {.classes = 10, .size = {64, 96}});
  EXPECT_EQ(built.weights.at("encoder.pos_embedding").shape, (Shape{1, 1 + 6 * 6, 192}));
}

TEST(Architectures, SayWhatTheyCannotBuild) {
  const auto build = [](const char* name, const ArchitectureOptions& options) {
    return usage_error([&] { build_architecture(name, options); });
  };
  EXPECT_EQ(build("resnet5", {}), "no architecture is called 'resnet5'; nearest: 'resnet50'");
  EXPECT_EQ(build("", {}), "no architecture is called ''");
  EXPECT_EQ(build("resnet18", {.classes = 0}),
            "resnet18: the number of classes, 0, is not between 1 and 1000000");
  EXPECT_NE(build("resnet18", {.classes = -3}).find("-3"), std::string::npos);
  EXPECT_NE(build("vit_b_32", {.size = {31, 31}}).find("vit_b_32 cannot take images of 31x31: "),
            std::string::npos);
  EXPECT_NE(build("resnet18", {.size = {0, 9}}), "");
  EXPECT_NE(build("resnet18", {.size = {224, std::int64_t{1} << 40}}), "");
}

// Values that a second implementation gives (SplitMix64, FNV-1a and the sum of four quarters
// written anew in Python).
TEST(SeededWeights, AreTheSameOnEveryMachine) {
  const Architecture built = build_architecture("resnet18", {.classes = 3});
  const WeightMap first = seeded_weights(built, 1);
  const auto expect_values = [&](const char* name, std::vector<float> expected) {
    for (std::size_t i = 0; i < expected.size(); ++i) {
      EXPECT_EQ(first.at(name).data()[i], expected[i]) << name << ' ' << i;
    }
  };
  expect_values("fc.bias", {0.016533982008695602F, 0.06296708434820175F, 0.05008823797106743F});
  expect_values("bn1.running_var", {1.1802668571472168F, 0.9956946969032288F, 0.975143551826477F});
  expect_values("conv1.weight",
                {0.0665435791015625F, 0.1198381707072258F, -0.0064980643801391125F});
  EXPECT_EQ(seeded_weights(built, 2).at("fc.bias").data()[0], -0.1272529810667038F);
}

TEST(SeededWeights, OfABackboneDoNotDependOnTheClasses) {
  const WeightMap few = seeded_weights(build_architecture("resnet18", {.classes = 3}), 1);
  const WeightMap many = seeded_weights(build_architecture("resnet18", {.classes = 9}), 1);
  const Tensor& a = few.at("layer4.0.conv1.weight");
  const Tensor& b = many.at("layer4.0.conv1.weight");
  EXPECT_TRUE(std::ranges::equal(a.values(), b.values()));
}

TEST(SeededWeights, HaveTheirMeanAndSpread) {
  const Architecture built = build_architecture("resnet18", {.classes = 3});
  const WeightMap weights = seeded_weights(built, 5);
  for (const auto& [name, expected] : built.weights) {
    const Tensor& tensor = weights.at(name);
    ASSERT_EQ(tensor.shape(), expected.shape);
    double sum = 0.0;
    double squares = 0.0;
    for (const float value : tensor.values()) {
      const double off = static_cast<double>(value) - expected.mean;
      EXPECT_LE(std::abs(off), 3.5 * expected.spread) << name;
      sum += off / expected.spread;
      squares += off * off / expected.spread / expected.spread;
    }
    // Five standard errors of the mean, and of the mean square of four summed uniform variables
    // (variance 1.7).
    const auto count = static_cast<double>(tensor.elements());
    EXPECT_LE(std::abs(sum / count), 5.0 / std::sqrt(count)) << name;
    EXPECT_NEAR(squares / count, 1.0, 5.0 * std::sqrt(1.7 / count)) << name;
  }
}

double mean_square(const Tensor& tensor) {
  double sum = 0.0;
  for (const float value : tensor.values()) {
    sum += static_cast<double>(value) * static_cast<double>(value);
  }
  return sum / static_cast<double>(tensor.elements());
}

/// Pictures of zero mean and mean square 1, smooth as photographs are: no two channels alike.
Tensor smooth_picture(std::int64_t side, std::uint64_t seed) {
  testing::Random random(seed);
  Tensor picture({1, 3, side, side});
  for (std::int64_t c = 0; c < 3; ++c) {
    float* const values = picture.mutable_data() + c * side * side;
    for (int wave = 0; wave < 8; ++wave) {
      const double across = random.uniform(-0.5, 0.5);
      const double down = random.uniform(-0.5, 0.5);
      const double phase = random.uniform(0.0, 6.28);
      for (std::int64_t i = 0; i < side * side; ++i) {
        const double at =
            across * static_cast<double>(i % side) + down * static_cast<double>(i / side);
        values[i] += static_cast<float>(std::sin(at + phase));
      }
    }
  }
  const double scale = 1.0 / std::sqrt(mean_square(picture));
  for (std::int64_t i = 0; i < picture.elements(); ++i) {
    float& value = picture.mutable_data()[i];
    value = static_cast<float>(scale * static_cast<double>(value));
  }
  return picture;
}

TEST(SeededWeights, KeepActivationsFromVanishingAndExploding) {
  for (const std::string name :
       {"resnet18", "resnet50", "mobilenet_v2", "efficientnet_b0", "convnext_tiny", "vit_ti_16"}) {
    for (const std::uint64_t seed : {1U, 2U}) {
      const Architecture built = build_architecture(name, {.classes = 50, .size = {96, 96}});
      PlanOptions options;
      options.observe = {"*"};
      Runner runner(Plan::make(built.graph, seeded_weights(built, seed), options));
      runner.add_hook("*", [&](const HookedOutput& output) {
        const double size = std::sqrt(mean_square(output.read()));
        EXPECT_GT(size, 0.05) << name << ' ' << output.layer();
        EXPECT_LT(size, 10.0) << name << ' ' << output.layer();
      });
      runner.run(smooth_picture(96, seed));
    }
  }
}

}  // namespace
}  // namespace leadsman
