// What an operator is: its contract, and the strategies that can compute it.
//
// An operator is one folder under ops/ (see DEVELOPERS.md, "Adding an operator") and one line in
// registry.cc. It knows shapes, attributes, weights and memory; it never sees a graph or a file.
#pragma once

#include <cstddef>
#include <initializer_list>
#include <limits>
#include <map>
#include <memory>
#include <optional>
#include <span>
#include <string>
#include <string_view>
#include <vector>

#include "leadsman/attributes.h"
#include "leadsman/tensor.h"
#include "ops/channel_affine.h"
#include "ops/epilogue.h"

namespace leadsman::ops {

enum class AttributeType {
  kFlag,
  kInteger,
  kNumber,
  kText,
  kPair,     ///< [height, width]; one integer stands for both
  kPadding,  ///< [top, left, bottom, right]; one integer or [height, width] stand for symmetric
};

struct AttributeSpec {
  std::string_view name;
  AttributeType type = AttributeType::kInteger;
  std::optional<AttributeValue> fallback;  ///< value when absent; nullopt: it must be given
  std::string_view meaning;
  double minimum = std::numeric_limits<double>::lowest();  ///< for each number in the value
  double maximum = std::numeric_limits<double>::max();
  std::vector<std::string_view> choices;  ///< for kText: the words allowed; empty: any
};

struct WeightSpec {
  std::string_view role;  ///< "weight", "bias", "mean", ...
  bool required = true;
  std::string_view meaning;
  bool trained = true;  ///< false: a running statistic, not counted among the parameters
};

struct Contract {
  std::string_view name;
  std::string_view meaning;  ///< one sentence, with the source of the method
  int min_inputs = 1;
  int max_inputs = 1;
  std::vector<AttributeSpec> attributes;
  std::vector<WeightSpec> weights;
};

/// One layer as operators see it: attributes complete, shapes known, weights by role.
struct OpContext {
  Attributes attributes;
  std::vector<Shape> inputs;
  std::map<std::string, Tensor, std::less<>> weights;
  Shape output;  ///< set once output_shape() has run
  /// True: each value must be one sum of the formula's own products (Accuracy::kExact).
  bool direct_sums = false;

  const Tensor* weight(std::string_view role) const {
    const auto found = weights.find(role);
    return found == weights.end() ? nullptr : &found->second;
  }
};

struct Cost {
  std::int64_t macs = 0;  ///< multiply-adds of the matrix-like part; 0 for elementwise work
  /// Length of the longest sum behind one output value: rounding errors grow like its square root
  /// (Higham & Mary 2019).
  std::int64_t reduction = 1;
};

/// Memory of one call. Inputs and output never overlap unless a kernel says runs_in_place().
struct KernelCall {
  std::span<const ConstTensorView> inputs;
  TensorView output;                ///< written in full, never read
  const float* residual = nullptr;  ///< same layout as the output; set iff the epilogue wants one
  std::byte* workspace = nullptr;   ///< workspace_bytes(threads) bytes, aligned to 64
  int threads = 1;
};

/// One layer made ready to run: packed weights and decisions. Immutable; `run` may be called from
/// several threads at once, with distinct workspaces.
class Kernel {
 public:
  virtual ~Kernel() = default;
  virtual std::size_t workspace_bytes(int /*threads*/) const { return 0; }
  /// Bytes that this kernel holds beside the checkpoint's own tensors (packed weights, tables).
  virtual std::size_t packed_bytes() const { return 0; }
  /// True when the output may be the very memory of input 0.
  virtual bool runs_in_place() const { return false; }
  virtual void run(const KernelCall& call) const = 0;
};

/// One way to compute an operator, in a file of its own.
class Strategy {
 public:
  virtual ~Strategy() = default;
  virtual std::string_view name() const = 0;
  /// Why this strategy cannot or should not compute this layer; empty when it does.
  virtual std::string refusal(const OpContext& context) const = 0;
  /// How much larger rounding errors are than those of plain sums of Cost::reduction products,
  /// as root mean squares; at least 1. Comparison derives its threshold from it.
  virtual double rounding_growth() const { return 1.0; }
  /// Requires refusal(context).empty().
  virtual std::unique_ptr<Kernel> prepare(const OpContext& context,
                                          const Epilogue& epilogue) const = 0;
};

/// Stateless; one constant instance each, listed in registry.cc.
class Operator {
 public:
  virtual ~Operator() = default;
  virtual const Contract& contract() const = 0;
  /// Checks inputs and weights against each other and gives the output's shape. Throws
  /// Error(kInput) saying which shapes do not meet; the caller adds the layer's name.
  virtual Shape output_shape(const OpContext& context) const = 0;
  /// Requires context.output to be set.
  virtual Cost cost(const OpContext& context) const = 0;
  /// In order of preference; the reference kernel is the last and never refuses.
  virtual std::span<const Strategy* const> strategies() const = 0;
  /// True when every kernel of this operator honours an Epilogue (residual and activation).
  virtual bool takes_epilogue() const { return false; }
  /// What the operator does to each channel, when that is an affine map that the planner may fold
  /// into the weights of a product before it.
  virtual std::optional<ChannelAffine> affine(const OpContext& /*context*/) const { return {}; }
  /// True when the output is the input's bytes under another shape: no work, no memory.
  virtual bool is_view(const OpContext& /*context*/) const { return false; }
};

/// Every operator, by name; nullptr when there is none.
const Operator* find_operator(std::string_view name);
std::span<const Operator* const> all_operators();

/// Checks `given` against the contract and fills in what is absent; pairs and paddings come out
/// in full. Throws Error(kInput) whose message begins with the attribute's name and a colon.
Attributes complete_attributes(const Contract& contract, const Attributes& given);

/// Throws Error(kInput) unless `actual` equals `expected`:
/// "weight has shape [64, 3, 7, 7], expected [64, 1, 7, 7]".
void require_shape(std::string_view what, const Shape& actual, const Shape& expected);
/// Throws Error(kInput) unless the rank is one of `ranks`:
/// "input has shape [1, 10], expected rank 4".
void require_rank(std::string_view what, const Shape& actual, std::initializer_list<int> ranks);

}  // namespace leadsman::ops
