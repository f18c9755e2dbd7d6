// The strategy that is no more than a name and a kernel.
#pragma once

#include <array>
#include <memory>
#include <type_traits>

#include "ops/operator.h"

namespace leadsman::ops {

/// Computes every layer with `KernelType`, which is made from (context, epilogue), or from
/// (context) or nothing where the operator takes no epilogue.
template <typename KernelType>
class StrategyOf final : public Strategy {
 public:
  explicit StrategyOf(std::string_view name) : name_(name) {}

  std::string_view name() const override { return name_; }
  std::string refusal(const OpContext& /*context*/) const override { return {}; }
  std::unique_ptr<Kernel> prepare(const OpContext& context,
                                  const Epilogue& epilogue) const override {
    if constexpr (std::is_constructible_v<KernelType, const OpContext&, const Epilogue&>) {
      return std::make_unique<KernelType>(context, epilogue);
    } else if constexpr (std::is_constructible_v<KernelType, const OpContext&>) {
      return std::make_unique<KernelType>(context);
    } else {
      return std::make_unique<KernelType>();
    }
  }

 private:
  std::string_view name_;
};

/// What Operator::strategies() returns when one plain kernel is all there is.
template <typename KernelType>
std::span<const Strategy* const> only_reference() {
  static const StrategyOf<KernelType> reference("reference");
  static const std::array<const Strategy*, 1> all{&reference};
  return all;
}

/// What it returns when a kernel that walks rows of channels stands before the plain one.
template <typename RowsKernelType, typename ReferenceKernelType>
std::span<const Strategy* const> rows_and_reference() {
  static const StrategyOf<RowsKernelType> rows("rows");
  static const StrategyOf<ReferenceKernelType> reference("reference");
  static const std::array<const Strategy*, 2> all{&rows, &reference};
  return all;
}

}  // namespace leadsman::ops
