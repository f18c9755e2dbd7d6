// Pictures made ready for a model while it runs on those before.
#pragma once

#include <deque>
#include <future>
#include <string>
#include <vector>

#include "leadsman/preprocess.h"

namespace leadsman::cli {

/// Reads, decodes and preprocesses pictures in order, as many at once as there are threads; with
/// one thread each when it is asked for. `settings` and `pictures` must outlive it.
class InputsAhead {
 public:
  InputsAhead(const std::vector<std::string>& pictures, const Preprocess& settings, int threads);
  /// The input of the next picture. Throws what reading it threw; then comes the next but one.
  Tensor next();

 private:
  void begin_more();

  const std::vector<std::string>& pictures_;
  const Preprocess& settings_;
  int threads_;
  std::size_t begun_ = 0;
  std::deque<std::future<Tensor>> waiting_;
};

}  // namespace leadsman::cli
