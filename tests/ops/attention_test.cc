#include "ops/attention/attention.h"

#include <array>
#include <cmath>
#include <limits>
#include <numeric>
#include <vector>

#include <gtest/gtest.h>

#include "leadsman/error.h"
#include "tests/support/compare.h"
#include "tests/support/fast_against_reference.h"
#include "tests/support/op_runner.h"
#include "tests/support/random.h"
#include "tests/support/targets.h"

namespace leadsman::testing {
namespace {

struct Sizes {
  std::int64_t n, heads, d, t, s;
};

OpCase joint_case(Random& random, const Sizes& z, const char* op = "attention") {
  OpCase c{.op = op, .inputs = {random.tensor({z.n, z.t, 3 * z.heads * z.d}, -2, 2)}};
  c.attributes.set("heads", z.heads);
  return c;
}

OpCase separate_case(Random& random, const Sizes& z, const char* op = "attention") {
  const std::int64_t channels = z.heads * z.d;
  OpCase c{.op = op,
           .inputs = {random.tensor({z.n, z.t, channels}, -2, 2),
                      random.tensor({z.n, z.s, channels}, -2, 2)}};
  if (c.op == "attention") c.inputs.push_back(random.tensor({z.n, z.s, channels}, -2, 2));
  c.attributes.set("heads", z.heads);
  return c;
}

TEST(AttentionBlocked, AgreesWithTheReferenceOnRandomShapes) {
  constexpr std::array<std::int64_t, 8> kWidths = {1, 3, 5, 16, 17, 31, 32, 64};
  Random random(30);
  for (int i = 0; i < 40; ++i) {
    const Sizes z{random.integer(1, 3), random.integer(1, 5), random.pick(kWidths),
                  random.integer(1, 70), random.integer(1, 70)};
    for (const char* op : {"attention", "attention_weights"}) {
      OpCase c = i % 2 == 0 ? joint_case(random, z, op) : separate_case(random, z, op);
      if (random.coin()) c.attributes.set("scale", random.uniform(0.01, 1.0));
      SCOPED_TRACE(std::string(op) + " " + c.inputs[0].shape().to_string() + " heads " +
                   std::to_string(z.heads));
      check_fast_strategy(c, "blocked", 16.0);
    }
  }
}

// More keys than fit at once: the softmax goes block by block. Scores that grow along the keys
// make every block move the largest one; scores that shrink leave it alone.
TEST(AttentionBlocked, LongSequencesAgreeWithTheReference) {
  Random random(31);
  for (const std::int64_t keys : {511, 512, 513, 777}) {
    for (const double slope : {-0.02, 0.0, 0.02}) {
      OpCase c = separate_case(random, {1, 1, 20, 19, keys});
      for (std::int64_t s = 0; s < keys; ++s) {
        for (std::int64_t e = 0; e < 20; ++e) {
          c.inputs[1].mutable_data()[s * 20 + e] +=
              static_cast<float>(slope * static_cast<double>(s));
        }
      }
      for (std::int64_t i = 0; i < c.inputs[0].elements(); ++i) {
        c.inputs[0].mutable_data()[i] = std::abs(c.inputs[0].data()[i]);
      }
      SCOPED_TRACE(std::to_string(keys) + " keys, slope " + std::to_string(slope));
      // Scores of up to 100 lose that much more in the exponential.
      check_fast_strategy(c, "blocked", 64.0);
      c.op = "attention_weights";
      c.inputs.pop_back();
      check_fast_strategy(c, "blocked", 64.0);
    }
  }
}

// Few keys at once, and block by block; a bias for each head, and one for all.
TEST(AttentionBlocked, AddsThePositionBias) {
  Random random(39);
  for (const std::int64_t keys : {1, 15, 49, 513, 777}) {
    for (const bool each_head : {false, true}) {
      const Sizes z{2, 3, 17, 13, keys};
      for (const char* op : {"attention", "attention_weights"}) {
        OpCase c = separate_case(random, z, op);
        c.weights["position_bias"] = random.tensor({each_head ? z.heads : 1, z.t, z.s}, -3, 3);
        SCOPED_TRACE(std::string(op) + " with " + std::to_string(keys) + " keys");
        check_fast_strategy(c, "blocked", 16.0);
      }
    }
  }
}

TEST(AttentionWeights, RowsAreNonNegativeAndSumToOne) {
  Random random(32);
  const Sizes z{2, 3, 17, 23, 41};
  const OpCase c = separate_case(random, z, "attention_weights");
  for (const std::string& strategy : strategy_names(c.op)) {
    SCOPED_TRACE(strategy);
    on_every_target([&] {
      const Tensor p = run_op(c, strategy);
      ASSERT_EQ(p.shape(), Shape({z.n, z.heads, z.t, z.s}));
      for (std::int64_t row = 0; row < z.n * z.heads * z.t; ++row) {
        double sum = 0.0;
        for (std::int64_t s = 0; s < z.s; ++s) {
          EXPECT_GE(p.data()[row * z.s + s], 0.0F);
          sum += static_cast<double>(p.data()[row * z.s + s]);
        }
        EXPECT_NEAR(sum, 1.0, 41 * kUnitRoundoff);
      }
    });
  }
}

// attention = attention_weights times v, head by head.
TEST(Attention, IsItsWeightsTimesItsValues) {
  Random random(33);
  const Sizes z{2, 2, 5, 13, 21};
  const std::int64_t channels = z.heads * z.d;
  const OpCase c = separate_case(random, z);
  OpCase w = c;
  w.op = "attention_weights";
  w.inputs.pop_back();
  const Tensor p = run_op(w, "reference");
  Tensor expected({z.n, z.t, channels});
  for (std::int64_t n = 0; n < z.n; ++n) {
    for (std::int64_t t = 0; t < z.t; ++t) {
      for (std::int64_t o = 0; o < channels; ++o) {
        double sum = 0.0;
        for (std::int64_t s = 0; s < z.s; ++s) {
          sum += static_cast<double>(p.data()[((n * z.heads + o / z.d) * z.t + t) * z.s + s]) *
                 static_cast<double>(c.inputs[2].data()[(n * z.s + s) * channels + o]);
        }
        expected.mutable_data()[(n * z.t + t) * channels + o] = static_cast<float>(sum);
      }
    }
  }
  for (const std::string& strategy : strategy_names(c.op)) {
    SCOPED_TRACE(strategy);
    on_every_target([&] { expect_close(run_op(c, strategy), expected, z.d + z.s); });
  }
}

// Without positions, attention does not know the order of its tokens.
TEST(Attention, PermutedTokensGivePermutedOutputs) {
  Random random(34);
  const Sizes z{1, 3, 8, 29, 29};
  const std::int64_t channels = 3 * z.heads * z.d;
  OpCase c = joint_case(random, z);
  std::vector<std::int64_t> order(static_cast<std::size_t>(z.t));
  std::iota(order.begin(), order.end(), 0);
  for (std::size_t i = order.size() - 1; i > 0; --i) {
    std::swap(order[i],
              order[static_cast<std::size_t>(random.integer(0, static_cast<std::int64_t>(i)))]);
  }
  OpCase shuffled = c;
  for (std::int64_t t = 0; t < z.t; ++t) {
    std::copy_n(c.inputs[0].data() + order[static_cast<std::size_t>(t)] * channels, channels,
                shuffled.inputs[0].mutable_data() + t * channels);
  }
  for (const std::string& strategy : strategy_names("attention")) {
    SCOPED_TRACE(strategy);
    on_every_target([&] {
      const Tensor y = run_op(c, strategy);
      Tensor expected(y.shape());
      for (std::int64_t t = 0; t < z.t; ++t) {
        std::copy_n(y.data() + order[static_cast<std::size_t>(t)] * z.heads * z.d, z.heads * z.d,
                    expected.mutable_data() + t * z.heads * z.d);
      }
      expect_close(run_op(shuffled, strategy), expected, z.d + z.t);
    });
  }
}

TEST(Attention, NanInOneValueReachesEveryQueryOfThatHeadAndChannel) {
  Random random(35);
  const Sizes z{1, 2, 4, 9, 9};
  OpCase c = joint_case(random, z);
  // Channel 1 of head 1's value, token 3.
  c.inputs[0].mutable_data()[3 * 24 + 16 + 4 + 1] = std::numeric_limits<float>::quiet_NaN();
  for (const std::string& strategy : strategy_names("attention")) {
    on_every_target([&] {
      const Tensor y = run_op(c, strategy);
      for (std::int64_t i = 0; i < y.elements(); ++i) {
        EXPECT_EQ(std::isnan(y.data()[i]), i % 8 == 5);
      }
    });
  }
}

TEST(Attention, WrongInputsAreRefused) {
  Random random(36);
  OpCase c = separate_case(random, {1, 2, 4, 5, 6});
  c.attributes.set("heads", std::int64_t{3});
  EXPECT_THROW(op_output_shape(c), Error);
  c.attributes.set("heads", std::int64_t{2});
  EXPECT_EQ(op_output_shape(c), Shape({1, 5, 8}));
  c.inputs[2] = random.tensor({1, 5, 8});
  EXPECT_THROW(op_output_shape(c), Error);
  c.inputs.pop_back();
  EXPECT_THROW(op_output_shape(c), Error);
  c.inputs = {random.tensor({1, 5, 8})};
  EXPECT_THROW(op_output_shape(c), Error);
}

TEST(Attention, CostsTwoProducts) {
  Random random(37);
  EXPECT_EQ(op_cost(joint_case(random, {2, 3, 64, 197, 197})).macs, 2 * 2 * 3 * 197 * 197 * 64);
  EXPECT_EQ(op_cost(separate_case(random, {2, 3, 8, 5, 7}, "attention_weights")).macs,
            2 * 3 * 5 * 7 * 8);
}

// Cordonnier, Loukas & Jaggi, "On the Relationship between Self-Attention and Convolutional
// Layers" (ICLR 2020), theorem 1: nine heads with the quadratic relative encoding express a 3x3
// convolution. Head h attends to the pixel at shift_h: q . k = -alpha |k_pos - q_pos - shift_h|^2
// up to a term without k, so q = (1, p + shift, and k = (-|p|^2, 2p): three features a head.
TEST(Attention, NineHeadsExpressAConvolution) {
  constexpr std::int64_t kSize = 8;
  constexpr std::int64_t kTokens = kSize * kSize;
  constexpr std::int64_t kIn = 5;
  constexpr std::int64_t kOut = 7;
  constexpr std::int64_t kHeads = 9;
  constexpr double kAlpha = 40.0;  // e^-40 of the weight is elsewhere
  Random random(38);

  OpCase conv{.op = "conv2d", .inputs = {random.tensor({1, kIn, kSize, kSize})}};
  conv.attributes.set("kernel_size", std::int64_t{3});
  conv.attributes.set("padding", std::int64_t{1});
  conv.weights["weight"] = random.tensor({kOut, kIn, 3, 3});
  const Tensor& x = conv.inputs[0];

  Tensor q({1, kTokens, kHeads * kIn});
  Tensor k({1, kTokens, kHeads * kIn});
  Tensor v({1, kTokens, kHeads * kIn});
  for (std::int64_t token = 0; token < kTokens; ++token) {
    const auto i = static_cast<double>(token / kSize);
    const auto j = static_cast<double>(token % kSize);
    for (std::int64_t head = 0; head < kHeads; ++head) {
      const std::int64_t at = (token * kHeads + head) * kIn;
      const double to_i = i + static_cast<double>(head / 3 - 1);
      const double to_j = j + static_cast<double>(head % 3 - 1);
      const std::array<double, 3> query = {1.0, 2.0 * to_i, 2.0 * to_j};
      const std::array<double, 3> key = {-(i * i + j * j), i, j};
      for (std::size_t e = 0; e < 3; ++e) {
        q.mutable_data()[at + static_cast<std::int64_t>(e)] = static_cast<float>(query[e]);
        k.mutable_data()[at + static_cast<std::int64_t>(e)] = static_cast<float>(key[e]);
      }
      for (std::int64_t c = 0; c < kIn; ++c) {
        v.mutable_data()[at + c] = x.data()[c * kTokens + token];
      }
    }
  }
  OpCase attention{.op = "attention", .inputs = {q, k, v}};
  attention.attributes.set("heads", kHeads);
  attention.attributes.set("scale", kAlpha);

  // The output projection: head h carries the kernel's weights at its shift.
  Tensor projection({kOut, kHeads * kIn});
  for (std::int64_t o = 0; o < kOut; ++o) {
    for (std::int64_t head = 0; head < kHeads; ++head) {
      for (std::int64_t c = 0; c < kIn; ++c) {
        projection.mutable_data()[(o * kHeads + head) * kIn + c] =
            conv.weights["weight"].data()[(o * kIn + c) * 9 + head];
      }
    }
  }

  on_every_target([&] {
    const Tensor expected = run_op(conv, "implicit");
    OpCase project{.op = "linear", .inputs = {run_op(attention, "blocked")}};
    project.weights["weight"] = projection;
    const Tensor y = run_op(project, "matrix");
    for (std::int64_t i = 1; i < kSize - 1; ++i) {
      for (std::int64_t j = 1; j < kSize - 1; ++j) {
        for (std::int64_t o = 0; o < kOut; ++o) {
          EXPECT_NEAR(y.data()[(i * kSize + j) * kOut + o],
                      expected.data()[o * kTokens + i * kSize + j],
                      rounding_threshold(kIn * 9) * 4.0);
        }
      }
    }
  });
}

}  // namespace
}  // namespace leadsman::testing
