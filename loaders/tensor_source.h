// What every format of tensor files gives to TensorFile.
#pragma once

#include <cstddef>
#include <map>
#include <memory>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "leadsman/tensor_file.h"
#include "loaders/mapped_file.h"

namespace leadsman::loaders {

/// An open file whose header has been checked. Messages of its errors name the place within the
/// file; TensorFile adds the path and the tensor.
class TensorSource {
 public:
  explicit TensorSource(std::shared_ptr<const MappedFile> file) : file_(std::move(file)) {}
  virtual ~TensorSource() = default;

  /// Tensor `index` of names().
  virtual Tensor read(std::size_t index) const = 0;

  const std::shared_ptr<const MappedFile>& file() const { return file_; }
  const std::vector<std::string>& names() const { return names_; }
  const TensorInfo& info(std::size_t index) const { return infos_[index]; }
  const Metadata& metadata() const { return metadata_; }
  std::optional<std::size_t> find(std::string_view name) const {
    const auto found = index_.find(name);
    if (found == index_.end()) return std::nullopt;
    return found->second;
  }

 protected:
  /// False when there is a tensor of that name already.
  bool add(const std::string& name, TensorInfo info) {
    if (!index_.emplace(name, names_.size()).second) return false;
    names_.push_back(name);
    infos_.push_back(std::move(info));
    return true;
  }
  Metadata metadata_;

 private:
  std::shared_ptr<const MappedFile> file_;
  std::vector<std::string> names_;
  std::vector<TensorInfo> infos_;
  std::map<std::string, std::size_t, std::less<>> index_;
};

}  // namespace leadsman::loaders
