#include "tests/support/op_runner.h"

#include <cmath>
#include <cstring>
#include <limits>
#include <memory>
#include <new>

#include <gtest/gtest.h>

#include "leadsman/error.h"

namespace leadsman::testing {
namespace {

constexpr std::size_t kGuardFloats = 64;

// Floats aligned to 64 bytes that begin as NaN and end in a guard zone.
class GuardedBuffer {
 public:
  explicit GuardedBuffer(std::size_t floats)
      : floats_(floats),
        data_(static_cast<float*>(
            ::operator new ((floats + kGuardFloats) * sizeof(float), std::align_val_t{64}))) {
    for (std::size_t i = 0; i < floats; ++i) data_[i] = std::numeric_limits<float>::quiet_NaN();
    for (std::size_t i = 0; i < kGuardFloats; ++i) data_[floats + i] = guard(i);
  }
  GuardedBuffer(const GuardedBuffer&) = delete;
  GuardedBuffer& operator=(const GuardedBuffer&) = delete;
  ~GuardedBuffer() { ::operator delete (data_, std::align_val_t{64}); }

  float* data() { return data_; }
  bool intact() const {
    for (std::size_t i = 0; i < kGuardFloats; ++i) {
      if (data_[floats_ + i] != guard(i)) return false;
    }
    return true;
  }

 private:
  static float guard(std::size_t i) { return 12345.0F + static_cast<float>(i); }
  std::size_t floats_;
  float* data_;
};

std::size_t float_count(const Shape& shape) {
  return static_cast<std::size_t>(shape.elements());
}

std::unique_ptr<GuardedBuffer> in_memory_order(const Tensor& tensor) {
  auto buffer = std::make_unique<GuardedBuffer>(float_count(tensor.shape()));
  copy_from_logical(tensor.data(), TensorView{buffer->data(), tensor.shape()});
  return buffer;
}

const ops::Operator& find(std::string_view op) {
  const ops::Operator* found = ops::find_operator(op);
  if (found == nullptr) throw_usage("no operator '" + std::string(op) + "'");
  return *found;
}

const ops::Strategy& find_strategy(std::string_view op, std::string_view strategy) {
  for (const ops::Strategy* each : find(op).strategies()) {
    if (each->name() == strategy) return *each;
  }
  throw_usage(std::string(op) + " has no strategy '" + std::string(strategy) + "'");
}

Tensor run_once(const ops::Kernel& kernel, const OpCase& c, const Shape& output_shape,
                const RunOptions& options) {
  std::vector<std::unique_ptr<GuardedBuffer>> inputs;
  std::vector<ConstTensorView> views;
  for (const Tensor& input : c.inputs) {
    inputs.push_back(in_memory_order(input));
    views.emplace_back(inputs.back()->data(), input.shape());
  }
  std::unique_ptr<GuardedBuffer> residual;
  if (c.residual.data() != nullptr) residual = in_memory_order(c.residual);
  GuardedBuffer own_output(float_count(output_shape));
  GuardedBuffer& output = options.in_place ? *inputs[0] : own_output;
  const std::size_t bytes = kernel.workspace_bytes(options.threads);
  GuardedBuffer workspace((bytes + sizeof(float) - 1) / sizeof(float));

  kernel.run({.inputs = views,
              .output = TensorView{output.data(), output_shape},
              .residual = residual ? residual->data() : nullptr,
              .workspace = reinterpret_cast<std::byte*>(workspace.data()),
              .threads = options.threads});

  EXPECT_TRUE(output.intact()) << "wrote behind the output";
  EXPECT_TRUE(workspace.intact()) << "wrote behind the workspace";
  for (std::size_t i = 0; i < inputs.size(); ++i) {
    if (i == 0 && options.in_place) continue;
    const auto fresh = in_memory_order(c.inputs[i]);
    EXPECT_EQ(0, std::memcmp(fresh->data(), inputs[i]->data(),
                             float_count(c.inputs[i].shape()) * sizeof(float)))
        << "changed input " << i;
  }
  return to_tensor(TensorView{output.data(), output_shape});
}

}  // namespace

ops::OpContext op_context(const OpCase& c) {
  const ops::Operator& op = find(c.op);
  ops::OpContext context;
  context.attributes = ops::complete_attributes(op.contract(), c.attributes);
  for (const Tensor& input : c.inputs) context.inputs.push_back(input.shape());
  context.weights = c.weights;
  context.direct_sums = c.direct_sums;
  context.output = op.output_shape(context);
  return context;
}

Shape op_output_shape(const OpCase& c) {
  return op_context(c).output;
}

ops::Cost op_cost(const OpCase& c) {
  return find(c.op).cost(op_context(c));
}

std::vector<std::string> strategy_names(std::string_view op) {
  std::vector<std::string> names;
  for (const ops::Strategy* each : find(op).strategies()) names.emplace_back(each->name());
  return names;
}

std::string refusal(const OpCase& c, std::string_view strategy) {
  return find_strategy(c.op, strategy).refusal(op_context(c));
}

Tensor run_op(const OpCase& c, std::string_view strategy, const RunOptions& options) {
  const ops::Strategy& chosen = find_strategy(c.op, strategy);
  const ops::OpContext context = op_context(c);
  const std::string reason = chosen.refusal(context);
  if (!reason.empty()) throw_usage(std::string(strategy) + " refuses: " + reason);
  const ops::Epilogue epilogue{.has_residual = c.residual.data() != nullptr,
                               .activation = c.activation};
  const std::unique_ptr<ops::Kernel> kernel = chosen.prepare(context, epilogue);
  if (options.in_place && !kernel->runs_in_place()) throw_usage("the kernel is not in-place");
  Tensor first = run_once(*kernel, c, context.output, options);
  const Tensor second = run_once(*kernel, c, context.output, options);
  const std::size_t bytes = float_count(first.shape()) * sizeof(float);
  EXPECT_TRUE(bytes == 0 || std::memcmp(first.data(), second.data(), bytes) == 0)
      << "two runs differ";
  return first;
}

}  // namespace leadsman::testing
