#include "tests/support/fast_against_reference.h"

#include <array>

#include <gtest/gtest.h>

#include "tests/support/compare.h"
#include "tests/support/targets.h"

namespace leadsman::testing {

void add_random_epilogue(Random& random, OpCase& c) {
  using enum ops::ActivationKind;
  constexpr std::array kKinds = {kNone,     kRelu, kRelu6,    kLeakyRelu,   kGelu,
                                 kGeluTanh, kSilu, kSigmoid,  kHardSigmoid, kHardSwish,
                                 kTanh,     kElu,  kSoftplus, kMish,        kQuickGelu};
  c.activation = {random.pick(kKinds), 0.125F};
  if (random.coin()) c.residual = random.tensor(op_output_shape(c));
}

void check_fast_strategy(const OpCase& c, std::string_view strategy, double factor) {
  ASSERT_EQ(refusal(c, strategy), "");
  const Tensor expected = run_op(c, "reference");
  OpCase plain = c;
  plain.activation = {};
  const double magnitude = rms(run_op(plain, "reference"));
  on_every_target([&] {
    const Tensor one = run_op(c, strategy);
    expect_close(one, expected, op_cost(c).reduction, magnitude, factor);
    for (const int threads : {2, 3, 5}) {
      SCOPED_TRACE("threads " + std::to_string(threads));
      expect_same_bits(run_op(c, strategy, {.threads = threads}), one);
    }
  });
}

}  // namespace leadsman::testing
