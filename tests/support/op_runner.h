// Runs one operator with a chosen strategy, outside any graph.
//
//   OpCase c{.op = "conv2d", .inputs = {x}, .weights = {{"weight", w}}};
//   c.attributes.set("kernel_size", std::int64_t{3});
//   const Tensor fast = run_op(c, "implicit", {.threads = 2});
//   expect_close(fast, run_op(c, "reference"), op_cost(c).reduction);
//
// Every run is guarded: output and workspace begin as NaN, so reading them shows; both are
// followed by guard zones that must stay untouched; inputs must stay untouched; the kernel runs
// twice and must give the same bits.
#pragma once

#include <map>
#include <string>
#include <string_view>
#include <vector>

#include "leadsman/tensor.h"
#include "ops/operator.h"

namespace leadsman::testing {

struct OpCase {
  std::string op = {};
  Attributes attributes = {};       ///< as a graph gives them: defaults may be left out
  std::vector<Tensor> inputs = {};  ///< logical order
  std::map<std::string, Tensor, std::less<>> weights = {};
  ops::Activation activation = {};  ///< of the epilogue
  Tensor residual = {};             ///< of the epilogue; default-made: none
  bool direct_sums = false;         ///< OpContext::direct_sums
};

struct RunOptions {
  int threads = 1;
  bool in_place = false;  ///< requires a kernel that runs_in_place()
};

/// The context that a strategy is given: attributes completed, output shape set. Throws Error as
/// the operator does.
ops::OpContext op_context(const OpCase& c);
Shape op_output_shape(const OpCase& c);
ops::Cost op_cost(const OpCase& c);

/// Names in order of preference.
std::vector<std::string> strategy_names(std::string_view op);
/// Why a strategy refuses the case; empty when it does not. An unknown name throws Error(kUsage).
std::string refusal(const OpCase& c, std::string_view strategy);

/// Output in logical order. Throws Error(kUsage) when the strategy is unknown or refuses.
Tensor run_op(const OpCase& c, std::string_view strategy, const RunOptions& options = {});

}  // namespace leadsman::testing
