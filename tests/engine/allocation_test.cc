// A run allocates nothing: every allocation function of the C library is counted.
#include <atomic>
#include <cerrno>
#include <cstdlib>

#include <gtest/gtest.h>

#include "leadsman/runner.h"
#include "tests/support/graph_builder.h"

// Sanitizers bring allocators of their own; the __libc_ names are glibc's.
#if defined(__GLIBC__) && !defined(__SANITIZE_ADDRESS__) && !defined(__SANITIZE_THREAD__)
#if defined(__has_feature)
#if __has_feature(address_sanitizer) || __has_feature(thread_sanitizer)
#define LEADSMAN_SANITIZED
#endif
#endif
#ifndef LEADSMAN_SANITIZED
#define LEADSMAN_COUNTS_ALLOCATIONS
#endif
#endif

#ifdef LEADSMAN_COUNTS_ALLOCATIONS

namespace {
std::atomic<bool> counting{false};
std::atomic<int> allocations{0};
void count() {
  if (counting.load(std::memory_order_relaxed)) ++allocations;
}
}  // namespace

extern "C" {
void* __libc_malloc(std::size_t size);
void* __libc_calloc(std::size_t count, std::size_t size);
void* __libc_realloc(void* memory, std::size_t size);
void* __libc_memalign(std::size_t alignment, std::size_t size);

void* malloc(std::size_t size) {
  count();
  return __libc_malloc(size);
}
void* calloc(std::size_t n, std::size_t size) {
  count();
  return __libc_calloc(n, size);
}
void* realloc(void* memory, std::size_t size) {
  count();
  return __libc_realloc(memory, size);
}
void* aligned_alloc(std::size_t alignment, std::size_t size) {
  count();
  return __libc_memalign(alignment, size);
}
int posix_memalign(void** memory, std::size_t alignment, std::size_t size) {
  count();
  *memory = __libc_memalign(alignment, size);
  return *memory == nullptr ? ENOMEM : 0;
}
}

namespace leadsman {
namespace {

TEST(Allocation, TheCounterCounts) {
  counting = true;
  allocations = 0;
  volatile auto* memory = new std::vector<int>(1000);
  counting = false;
  EXPECT_GE(allocations.load(), 2);
  delete memory;
}

TEST(Allocation, ARunAllocatesNothing) {
  for (const testing::GraphBuilder& b : {testing::small_conv_net(), testing::small_transformer()}) {
    for (const int threads : {1, 2, 3}) {
      PlanOptions options;
      options.threads = threads;
      Runner runner(Plan::make(b.graph(), b.weights(), options));
      runner.enable_profile(true);
      const Tensor input = testing::Random(1).tensor(input_shapes_at(b.graph(), 1, 0, 0).front());
      runner.run(input);  // the pool of threads is made here
      allocations = 0;
      counting = true;
      for (int i = 0; i < 3; ++i) runner.run(input);
      counting = false;
      EXPECT_EQ(allocations.load(), 0) << threads << " threads";
    }
  }
}

}  // namespace
}  // namespace leadsman

#else

TEST(Allocation, ARunAllocatesNothing) {
  GTEST_SKIP() << "this build's allocator cannot be counted";
}

#endif
