// batch_norm and add: the float forms against the plain ones; in place; epilogues.
#include <gtest/gtest.h>

#include "ops/simd/target.h"
#include "tests/support/compare.h"
#include "tests/support/op_runner.h"
#include "tests/support/random.h"
#include "tests/support/targets.h"

namespace leadsman::testing {
namespace {

ops::Activation random_activation(Random& random) {
  using ops::ActivationKind;
  const auto kind = random.pick(std::vector{ActivationKind::kNone, ActivationKind::kRelu,
                                            ActivationKind::kRelu6, ActivationKind::kLeakyRelu,
                                            ActivationKind::kSilu, ActivationKind::kHardSwish});
  return {.kind = kind, .parameter = 0.1F};
}

Shape random_shape(Random& random) {
  if (random.coin()) return {random.integer(1, 70), random.integer(1, 90)};
  return {random.integer(1, 2), random.integer(1, 90), random.integer(1, 20),
          random.integer(1, 20)};
}

void expect_rows_agree(const OpCase& c) {
  const Tensor expected = run_op(c, "reference");
  for (const std::string& target : ops::simd::supported_targets()) {
    SCOPED_TRACE(c.op + " of " + c.inputs[0].shape().to_string() + ", " + target);
    const ops::simd::ForcedTarget forced(target);
    const Tensor actual = run_op(c, "rows");
    expect_close(actual, expected, 1, 1.0);
    expect_same_bits(run_op(c, "rows", {.threads = 3, .in_place = true}), actual);
  }
}

TEST(BatchNormRows, AgreesWithTheReferenceOnRandomShapes) {
  Random random(41);
  for (int i = 0; i < 40; ++i) {
    const Shape shape = random_shape(random);
    const Shape channels{channel_count(shape)};
    OpCase c{.op = "batch_norm",
             .inputs = {random.tensor(shape, -2, 2)},
             .weights = {{"mean", random.tensor(channels)},
                         {"variance", random.tensor(channels, 0.5, 2)}},
             .activation = random_activation(random)};
    if (random.coin()) c.weights["weight"] = random.tensor(channels);
    if (random.coin()) c.weights["bias"] = random.tensor(channels);
    if (random.coin()) c.residual = random.tensor(shape);
    expect_rows_agree(c);
  }
}

TEST(AddRows, AgreesWithTheReferenceOnRandomShapes) {
  Random random(42);
  for (int i = 0; i < 40; ++i) {
    const Shape shape = random_shape(random);
    OpCase c{.op = "add",
             .inputs = {random.tensor(shape), random.tensor(shape)},
             .activation = random_activation(random)};
    if (random.coin()) c.residual = random.tensor(shape);
    expect_rows_agree(c);
  }
}

// (x - mean) of 4096.5 and 4096 is exact; x * scale - mean * scale would lose ten bits.
TEST(BatchNormRows, KeepsSmallDeviationsFromALargeMean) {
  const OpCase c{.op = "batch_norm",
                 .inputs = {Tensor(Shape{1, 2}, {4096.5F, 4095.75F})},
                 .weights = {{"mean", Tensor(Shape{2}, {4096.0F, 4096.0F})},
                             {"variance", Tensor(Shape{2}, {0.03F, 0.03F})}}};
  const Tensor expected = run_op(c, "reference");
  const Tensor actual = run_op(c, "rows");
  for (std::int64_t i = 0; i < 2; ++i) {
    EXPECT_LE(ulp_distance(actual.data()[i], static_cast<double>(expected.data()[i])), 1.0);
  }
}

// The statistics of the input itself give mean 0 and variance 1.
TEST(BatchNorm, Standardises) {
  Random random(43);
  const Shape shape{1, 1, 30, 30};
  const Tensor x = random.tensor(shape, 3, 7);
  double sum = 0.0;
  double squares = 0.0;
  for (const float value : x.values()) sum += static_cast<double>(value);
  const double mean = sum / 900;
  for (const float value : x.values()) {
    squares += (static_cast<double>(value) - mean) * (static_cast<double>(value) - mean);
  }
  OpCase c{.op = "batch_norm",
           .inputs = {x},
           .weights = {{"mean", Tensor(Shape{1}, {static_cast<float>(mean)})},
                       {"variance", Tensor(Shape{1}, {static_cast<float>(squares / 900)})}}};
  c.attributes.set("eps", 0.0);
  for (const std::string& strategy : strategy_names("batch_norm")) {
    const Tensor y = run_op(c, strategy);
    double y_sum = 0.0;
    for (const float value : y.values()) y_sum += static_cast<double>(value);
    EXPECT_NEAR(y_sum / 900, 0.0, 1e-6) << strategy;
    EXPECT_NEAR(rms(y), 1.0, 1e-6) << strategy;
  }
}

// Factors that are repeated, against the product with all of them written out.
TEST(Mul, OfFactorsIsThatOfRepeatedOnes) {
  Random random(45);
  for (int i = 0; i < 40; ++i) {
    const std::int64_t n = random.integer(1, 3);
    const std::int64_t c = random.integer(1, 70);
    const Shape full = random.coin() ? Shape{n, c, random.integer(1, 20), random.integer(1, 20)}
                                     : Shape{n, c, random.integer(1, 90)};
    const bool over_last = random.coin();  // positions of an image, channels of tokens
    const std::int64_t inner = full.elements() / (n * c);
    Shape small = full.with(1, 1);
    if (over_last) small = full.rank() == 4 ? Shape{n, c, 1, 1} : full.with(2, 1);
    const Tensor x = random.tensor(full);
    const Tensor factors = random.tensor(small);
    Tensor repeated(full);
    for (std::int64_t at = 0; at < full.elements(); ++at) {
      repeated.mutable_data()[at] =
          factors.data()[over_last ? at / inner : at / (c * inner) * inner + at % inner];
    }
    SCOPED_TRACE(full.to_string() + " times " + small.to_string());
    const Tensor expected = run_op({.op = "mul", .inputs = {x, repeated}}, "reference");
    const OpCase product{.op = "mul", .inputs = {x, factors}};
    for (const std::string& strategy : strategy_names("mul")) {
      on_every_target([&] {
        for (const int threads : {1, 3}) {
          const RunOptions options{.threads = threads, .in_place = threads == 3};
          expect_same_bits(run_op(product, strategy, options), expected);
          expect_same_bits(run_op({.op = "mul", .inputs = {x, repeated}}, strategy, options),
                           expected);
        }
      });
    }
  }
}

// Both summands, and both factors, may be the memory that is overwritten.
TEST(InPlace, OfOneInputTwice) {
  Random random(44);
  const Tensor x = random.tensor({3, 50});
  for (const char* op : {"add", "mul"}) {
    const bool add = std::string_view(op) == "add";
    const OpCase c{.op = op, .inputs = {x, x}};
    for (const std::string& strategy : strategy_names(op)) {
      const ops::OpContext context = op_context(c);
      for (const ops::Strategy* each : ops::find_operator(op)->strategies()) {
        if (each->name() != strategy) continue;
        Tensor y = x;
        float* data = y.mutable_data();
        const std::vector<ConstTensorView> inputs(2, {data, x.shape()});
        each->prepare(context, {})->run({.inputs = inputs, .output = {data, x.shape()}});
        for (std::int64_t i = 0; i < x.elements(); ++i) {
          const float v = x.data()[i];
          ASSERT_EQ(data[i], add ? v + v : v * v) << op << " " << strategy;
        }
      }
    }
  }
}

}  // namespace
}  // namespace leadsman::testing
