#include "ops/simd/target.h"

#include <array>
#include <cstdint>
#include <cstdlib>
#include <mutex>
#include <utility>

#include "leadsman/error.h"
#include "ops/simd/wanted_targets.h"

#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "ops/simd/target.cc"
#include "hwy/foreach_target.h"
#include "hwy/highway.h"

HWY_BEFORE_NAMESPACE();
namespace leadsman::ops::simd::HWY_NAMESPACE {

std::int64_t running_target() {
  return HWY_TARGET;
}

}  // namespace leadsman::ops::simd::HWY_NAMESPACE
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace leadsman::ops::simd {
namespace {

HWY_EXPORT(running_target);

constexpr auto kNames = std::to_array<std::pair<std::int64_t, std::string_view>>({
#if HWY_ARCH_X86
  {HWY_AVX3, "avx512"}, {HWY_AVX2, "avx2"}, {HWY_SSE4, "sse4"},
#endif
#if HWY_ARCH_ARM
      {HWY_NEON, "neon"},
#endif
      {HWY_EMU128, "portable"}, {HWY_SCALAR, "portable"},
});

// Bits of the targets that have code here and run on this machine.
std::int64_t supported_bits() {
  return (hwy::SupportedTargets() & HWY_TARGETS) | HWY_STATIC_TARGET;
}

std::int64_t find_bit(std::string_view name) {
  for (const auto& [bit, known] : kNames) {
    if (known == name && (supported_bits() & bit) != 0) return bit;
  }
  return 0;
}

}  // namespace

std::vector<std::string> supported_targets() {
  std::vector<std::string> names;
  for (const auto& [bit, name] : kNames) {
    if ((supported_bits() & bit) != 0) names.emplace_back(name);
  }
  return names;
}

void choose_target() {
  static std::once_flag once;
  std::call_once(once, [] {
    const char* name = std::getenv("LEADSMAN_SIMD");
    if (name == nullptr || *name == '\0') return;
    try {
      force_target(name);
    } catch (const Error& error) {
      throw_usage(std::string("LEADSMAN_SIMD: ") + error.what());
    }
  });
}

void force_target(std::string_view name) {
  const std::int64_t bit = find_bit(name);
  if (bit == 0) {
    std::string message(name);
    message += " is no instruction set of this machine; it has";
    const std::vector<std::string> known = supported_targets();
    for (std::size_t i = 0; i < known.size(); ++i) message += (i == 0 ? " " : ", ") + known[i];
    throw_usage(message);
  }
  hwy::GetChosenTarget().Update(bit);
}

std::string_view target_in_use() {
  const std::int64_t running = HWY_DYNAMIC_DISPATCH(running_target)();
  for (const auto& [bit, name] : kNames) {
    if (bit == running) return name;
  }
  return "unknown";
}

}  // namespace leadsman::ops::simd
#endif  // HWY_ONCE
