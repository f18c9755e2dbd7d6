// Every strategy of every operator against what PyTorch computed (operator_cases.h).
#include <algorithm>
#include <array>
#include <cmath>

#include <gtest/gtest.h>

#include "ops/simd/target.h"
#include "tests/support/compare.h"
#include "tests/support/operator_cases.h"

namespace leadsman::testing {
namespace {

// Operators that move values, or round the exact result of one operation once.
bool is_exact(std::string_view op) {
  constexpr std::array kExact{"adaptive_max_pool",
                              "pad",
                              "channel_shuffle",
                              "class_token",
                              "concat",
                              "features_to_image",
                              "flatten",
                              "identity",
                              "image_to_tokens",
                              "max_pool",
                              "mul",
                              "select",
                              "slice",
                              "space_to_depth",
                              "tokens_to_image",
                              "transpose"};
  return std::ranges::find(kExact, op) != kExact.end();
}

void expect_equal(const Tensor& actual, const Tensor& expected) {
  ASSERT_EQ(actual.shape(), expected.shape());
  for (std::int64_t i = 0; i < expected.elements(); ++i) {
    const float a = actual.data()[i];
    const float e = expected.data()[i];
    ASSERT_TRUE(a == e || (std::isnan(a) && std::isnan(e)))
        << "value " << i << " is " << a << ", expected " << e;
  }
}

class StoredCases : public ::testing::TestWithParam<const ops::Operator*> {};

void expect_agreement(const StoredCase& stored, const std::string& strategy) {
  const Tensor actual = run_op(stored.call, strategy);
  if (is_exact(stored.call.op)) {
    expect_equal(actual, stored.expected);
  } else {
    // The reference kernels sum in double: what they owe is a few roundings at the end.
    const std::int64_t reduction = strategy == "reference" ? 0 : op_cost(stored.call).reduction;
    expect_close(actual, stored.expected, reduction);
  }
  for (const int threads : {2, 5}) {
    expect_same_bits(run_op(stored.call, strategy, {.threads = threads}), actual);
  }
}

TEST_P(StoredCases, AgreeOnEveryInstructionSet) {
  const std::string op(GetParam()->contract().name);
  for (const StoredCase& stored : stored_cases(op)) {
    for (const std::string& strategy : strategy_names(op)) {
      if (!refusal(stored.call, strategy).empty()) continue;
      for (const std::string& target : ops::simd::supported_targets()) {
        if (strategy == "reference" && target != ops::simd::supported_targets()[0]) continue;
        SCOPED_TRACE(stored.name + ", " + strategy + ", " + target);
        const ops::simd::ForcedTarget forced(target);
        expect_agreement(stored, strategy);
      }
    }
  }
}

INSTANTIATE_TEST_SUITE_P(AllOperators, StoredCases, ::testing::ValuesIn(ops::all_operators()),
                         [](const auto& test) { return std::string(test.param->contract().name); });

// How often the operator's stored cases ran with the output in the memory of input 0.
int run_in_place(const ops::Operator& op) {
  int runs = 0;
  for (const StoredCase& stored : stored_cases(op.contract().name)) {
    const ops::OpContext context = op_context(stored.call);
    const ops::Epilogue epilogue{.has_residual = stored.call.residual.data() != nullptr,
                                 .activation = stored.call.activation};
    for (const ops::Strategy* strategy : op.strategies()) {
      if (!strategy->refusal(context).empty()) continue;
      if (!strategy->prepare(context, epilogue)->runs_in_place()) continue;
      SCOPED_TRACE(stored.call.op + ", " + stored.name + ", " + std::string(strategy->name()));
      expect_same_bits(run_op(stored.call, strategy->name(), {.threads = 2, .in_place = true}),
                       run_op(stored.call, strategy->name()));
      ++runs;
    }
  }
  return runs;
}

TEST(InPlace, ChangesNothing) {
  std::vector<std::string_view> in_place;
  for (const ops::Operator* op : ops::all_operators()) {
    if (run_in_place(*op) > 0) in_place.push_back(op->contract().name);
  }
  for (const char* expected : {"activation", "add", "batch_norm", "mul", "position_embed"}) {
    EXPECT_NE(std::ranges::find(in_place, expected), in_place.end()) << expected;
  }
}

}  // namespace
}  // namespace leadsman::testing
