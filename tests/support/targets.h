// Runs a test body on every instruction set that the machine supports.
#pragma once

#include <string>

#include <gtest/gtest.h>

#include "ops/simd/target.h"

namespace leadsman::testing {

/// Calls body() once for each target, forced, and checks that its code is what runs.
template <typename Body>
void on_every_target(const Body& body) {
  for (const std::string& name : ops::simd::supported_targets()) {
    SCOPED_TRACE("target " + name);
    const ops::simd::ForcedTarget forced(name);
    ASSERT_EQ(ops::simd::target_in_use(), name);
    body();
    ASSERT_EQ(ops::simd::target_in_use(), name);
  }
}

}  // namespace leadsman::testing
