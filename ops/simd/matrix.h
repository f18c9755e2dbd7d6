// The matrix kernel: every convolution, linear layer and attention product ends here.
//
//   c[r, o] = activation(bias[o] + sum over k of a[r, k] * b[k, o] + residual[r, o])
//
// a: `rows` rows of `taps` pieces of `depth` neighbouring floats each. Either row r begins at
//    a + r * a_stride (one tap), or piece t of row r is where table[t * table_stride + r] points.
//    Rows may overlap and repeat; nothing is assumed about their alignment.
// b: panels of 16 columns (pack.h), k = t * depth + e; aligned to 64 bytes for speed only.
// c: row r at c + r * c_stride; columns 0 .. cols-1 of each row are written, nothing else, and
//    never read before that. `residual` has the layout of c, or is null; it may be c itself.
// bias: as long as the panels are wide.
//
// Each value is one sum in the order of k, so it does not depend on how a product is cut into
// calls: a caller may hand out rows and panels to threads as it likes.
#pragma once

#include <cstdint>

#include "ops/epilogue.h"

namespace leadsman::ops::simd {

struct MatrixCall {
  const float* a = nullptr;
  std::int64_t a_stride = 0;
  const float* const* table = nullptr;
  std::int64_t table_stride = 0;
  std::int64_t taps = 1;
  std::int64_t depth = 0;
  std::int64_t rows = 0;

  const float* panels = nullptr;
  const float* bias = nullptr;
  std::int64_t cols = 0;
  /// Panels that this thread is likely to read next; fetched meanwhile. A hint, or null.
  const float* next_panels = nullptr;

  float* c = nullptr;
  std::int64_t c_stride = 0;
  const float* residual = nullptr;
  Activation activation;
};

void matrix_product(const MatrixCall& call);

/// How a product of `rows` x `depth` (all taps) x `cols` is cut into tasks: strips of rows by
/// groups of panels. Depends on nothing but the sizes, so the bits of a result do not either.
struct MatrixTasks {
  std::int64_t strip_rows = 0;
  std::int64_t strips = 0;
  std::int64_t group_panels = 0;
  std::int64_t groups = 0;

  MatrixTasks(std::int64_t rows, std::int64_t depth, std::int64_t cols);
  std::int64_t count() const { return strips * groups; }
};

/// Hint for MatrixCall::next_panels of task `task` of a product of packed `panels`, when `threads`
/// threads take tasks in turn; null when its panels are at hand anyway.
const float* next_panels(const MatrixTasks& tasks, std::int64_t task, int threads,
                         const float* panels, std::int64_t depth);

}  // namespace leadsman::ops::simd
