#include "ops/simd/peak.h"

#include <algorithm>
#include <atomic>
#include <cstdint>
#include <ctime>

#include "core/threads.h"
#include "ops/simd/wanted_targets.h"

#undef HWY_TARGET_INCLUDE
#define HWY_TARGET_INCLUDE "ops/simd/peak.cc"
#include "hwy/foreach_target.h"
#include "hwy/highway.h"

HWY_BEFORE_NAMESPACE();
namespace leadsman::ops::simd::HWY_NAMESPACE {

namespace hn = hwy::HWY_NAMESPACE;

// A vector register that inline assembly may have changed.
#ifdef __aarch64__
#define LEADSMAN_KEPT "+w"
#else
#define LEADSMAN_KEPT "+v"
#endif

// 12 chains of multiply-adds hide the latency and fit in 16 registers. Returns what keeps the
// compiler from leaving it out; `flops` counts two for each multiply-add of a lane.
float multiply_adds(std::int64_t steps, std::int64_t& flops) {
  const hn::ScalableTag<float> d;
  const auto factor = hn::Set(d, 0.999999F);
  const auto term = hn::Set(d, 1e-6F);
  auto a = hn::Iota(d, 1.0F), b = a, c = a, e = a, f = a, g = a;
  auto h = a, i = a, j = a, k = a, l = a, m = a;
  for (std::int64_t step = 0; step < steps; ++step) {
    a = hn::MulAdd(a, factor, term);
    b = hn::MulAdd(b, factor, term);
    c = hn::MulAdd(c, factor, term);
    e = hn::MulAdd(e, factor, term);
    f = hn::MulAdd(f, factor, term);
    g = hn::MulAdd(g, factor, term);
    h = hn::MulAdd(h, factor, term);
    i = hn::MulAdd(i, factor, term);
    j = hn::MulAdd(j, factor, term);
    k = hn::MulAdd(k, factor, term);
    l = hn::MulAdd(l, factor, term);
    m = hn::MulAdd(m, factor, term);
#if defined(__GNUC__) && HWY_TARGET != HWY_SCALAR && HWY_TARGET != HWY_EMU128
    // Otherwise the compiler sees that all chains are the same.
    asm(""
        : LEADSMAN_KEPT(a.raw), LEADSMAN_KEPT(b.raw), LEADSMAN_KEPT(c.raw), LEADSMAN_KEPT(e.raw),
          LEADSMAN_KEPT(f.raw), LEADSMAN_KEPT(g.raw));
    asm(""
        : LEADSMAN_KEPT(h.raw), LEADSMAN_KEPT(i.raw), LEADSMAN_KEPT(j.raw), LEADSMAN_KEPT(k.raw),
          LEADSMAN_KEPT(l.raw), LEADSMAN_KEPT(m.raw));
#endif
  }
  flops = steps * 24 * static_cast<std::int64_t>(hn::Lanes(d));
  const auto sum = hn::Add(
      hn::Add(hn::Add(a, b), hn::Add(c, e)),
      hn::Add(hn::Add(hn::Add(f, g), hn::Add(h, i)), hn::Add(hn::Add(j, k), hn::Add(l, m))));
  return hn::GetLane(sum);
}

}  // namespace leadsman::ops::simd::HWY_NAMESPACE
HWY_AFTER_NAMESPACE();

#if HWY_ONCE
namespace leadsman::ops::simd {

HWY_EXPORT(multiply_adds);

double now(int threads) {
  timespec time{};
  clock_gettime(threads == 1 ? CLOCK_THREAD_CPUTIME_ID : CLOCK_MONOTONIC, &time);
  return static_cast<double>(time.tv_sec) + 1e-9 * static_cast<double>(time.tv_nsec);
}

double measure_peak(int threads) {
  constexpr std::int64_t kSteps = 20000;
  static std::atomic<float> sink{0.0F};
  double best = 0.0;
  // The best of several short measurements, as others may use the machine.
  for (int round = 0; round < 40; ++round) {
    std::int64_t flops = 0;
    const double begin = now(threads);
    parallel_for(threads, threads, [&](std::int64_t task, int) {
      std::int64_t own = 0;
      sink = HWY_DYNAMIC_DISPATCH(multiply_adds)(kSteps, own);
      if (task == 0) flops = own;
    });
    best = std::max(best, static_cast<double>(flops) * threads / (now(threads) - begin));
  }
  return best;
}

}  // namespace leadsman::ops::simd
#endif  // HWY_ONCE
