#include "inputs_ahead.h"

#include <utility>

#include "leadsman/picture.h"

namespace leadsman::cli {

InputsAhead::InputsAhead(const std::vector<std::string>& pictures, const Preprocess& settings,
                         int threads)
    : pictures_(pictures), settings_(settings), threads_(threads) {
  begin_more();
}

Tensor InputsAhead::next() {
  std::future<Tensor> first = std::move(waiting_.front());
  waiting_.pop_front();
  first.wait();  // before others begin: with one thread they would not be ahead
  begin_more();
  return first.get();
}

void InputsAhead::begin_more() {
  const auto how = threads_ > 1 ? std::launch::async : std::launch::deferred;
  while (begun_ < pictures_.size() && std::cmp_less(waiting_.size(), threads_)) {
    waiting_.push_back(std::async(how, [this, &picture = pictures_[begun_++]] {
      return preprocess(read_picture(picture, settings_.orientation), settings_);
    }));
  }
}

}  // namespace leadsman::cli
