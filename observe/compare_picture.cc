#include "leadsman/compare_picture.h"

#include <algorithm>
#include <cmath>
#include <limits>

#include "leadsman/error.h"
#include "leadsman/runner.h"
#include "observe/reference.h"

namespace leadsman {
namespace {

constexpr double kInfinity = std::numeric_limits<double>::infinity();

Picture need_picture(const ReferenceSource& reference, const std::string& stage) {
  const std::string name = "preprocess:" + stage;
  const std::optional<Tensor> tensor = reference(name);
  if (!tensor) {
    throw_input("holds no stages of a picture ('" + name +
                "' is missing); the exporter writes them when it is given one: "
                "export(..., picture=FILE), or --picture FILE");
  }
  const Shape& shape = tensor->shape();
  if (shape.rank() != 4 || shape[0] != 1 || shape[1] != 3 || shape.elements() == 0) {
    throw_input("'" + name + "' has shape " + shape.to_string() +
                ", a picture is [1, 3, height, width]");
  }
  const std::int64_t area = shape[2] * shape[3];
  Picture picture{shape[3], shape[2],
                  std::vector<std::uint8_t>(static_cast<std::size_t>(3 * area))};
  for (std::int64_t c = 0; c < 3; ++c) {
    for (std::int64_t i = 0; i < area; ++i) {
      const float level = tensor->data()[c * area + i];
      if (!(level >= 0.0f && level <= 255.0f) || level != std::floor(level)) {
        throw_input("'" + name + "' holds a value that is not a level 0..255");
      }
      picture.rgb[static_cast<std::size_t>(i * 3 + c)] = static_cast<std::uint8_t>(level);
    }
  }
  return picture;
}

std::string size_text(const Picture& picture) {
  return std::to_string(picture.height) + "x" + std::to_string(picture.width);
}

bool same_size(const Picture& a, const Picture& b) {
  return a.height == b.height && a.width == b.width;
}

LevelDifference difference(const Picture& ours, const Picture& reference) {
  if (!same_size(ours, reference)) return {kInfinity, 1.0};
  int largest = 0;
  std::int64_t count = 0;
  for (std::size_t i = 0; i < ours.rgb.size(); ++i) {
    const int levels = std::abs(int{ours.rgb[i]} - int{reference.rgb[i]});
    largest = std::max(largest, levels);
    count += levels > 0 ? 1 : 0;
  }
  return {static_cast<double>(largest),
          static_cast<double>(count) / static_cast<double>(ours.rgb.size())};
}

double value_or(const std::vector<double>& values, std::int64_t channel, double otherwise) {
  return values.empty() ? otherwise : values[static_cast<std::size_t>(channel)];
}

LevelDifference difference(const Tensor& ours, const Tensor& reference,
                           const Preprocess& settings) {
  if (!(ours.shape() == reference.shape())) return {kInfinity, 1.0};
  const std::int64_t area = ours.shape()[2] * ours.shape()[3];
  LevelDifference found;
  std::int64_t count = 0;
  for (std::int64_t c = 0; c < ours.shape()[1]; ++c) {
    const double level = std::abs(value_or(settings.stddev, c, 1.0) / settings.scale);
    for (std::int64_t i = c * area; i < (c + 1) * area; ++i) {
      const float a = ours.data()[i];
      const float b = reference.data()[i];
      if (a == b) continue;
      ++count;
      const double levels = std::abs(static_cast<double>(a) - static_cast<double>(b)) * level;
      found.largest = std::max(found.largest, std::isfinite(levels) ? levels : kInfinity);
    }
  }
  found.share = static_cast<double>(count) / static_cast<double>(ours.elements());
  return found;
}

// (value * scale - mean) / std takes five roundings in float, those of the constants included;
// each is at most u = 2^-24 of a term that is at most 255 * scale + |mean|, and both libraries
// have theirs.
double rounding_in_levels(const Preprocess& settings) {
  double offset = 0.0;
  for (const double mean : settings.mean) offset = std::max(offset, std::abs(mean));
  return 2.0 * 5.0 * 0x1p-24 * (255.0 + offset / std::abs(settings.scale));
}

class Comparer {
 public:
  Comparer(const Preprocess& settings, const Graph& graph, const WeightMap& weights,
           const ReferenceSource& reference, const PictureCompareOptions& options)
      : settings_(settings),
        graph_(graph),
        weights_(weights),
        reference_(reference),
        options_(options) {}

  PictureComparison run(const Picture& decoded) {
    const Picture their_decoded = need_picture(reference_, "decoded");
    const Picture their_resized = need_picture(reference_, "resized");
    const Picture their_cropped = need_picture(reference_, "cropped");
    for (const GraphInput& input : graph_.inputs) inputs_.push_back(need(reference_, input.name));

    const PreprocessStages ours = preprocess_stages(decoded, settings_);
    add("decoded", decoded, decoded, their_decoded, options_.decoder_levels);
    const PictureSize size = resized_size(settings_, {their_decoded.height, their_decoded.width});
    add("resized", ours.resized, resize(their_decoded, size, settings_.interpolation),
        their_resized);
    add("cropped", ours.cropped,
        settings_.crop ? centre_crop(their_resized, *settings_.crop) : their_resized,
        their_cropped);
    add_normalised(ours.normalised, normalise(their_cropped, settings_));
    result_.only_decoder_differs =
        result_.first_departure.empty() && result_.stages[0].isolated.largest > 0.0;
    compare_outputs(ours.normalised);
    return std::move(result_);
  }

 private:
  void add(const char* stage, const Picture& chained, const Picture& isolated,
           const Picture& expected, int allowed = 0) {
    StageComparison row;
    row.chained = difference(chained, expected);
    row.isolated = difference(isolated, expected);
    row.allowed = allowed;
    if (!same_size(isolated, expected)) {
      row.remark = size_text(isolated) + " instead of " + size_text(expected);
    }
    finish(stage, std::move(row));
  }

  void add_normalised(const Tensor& chained, const Tensor& isolated) {
    const Tensor& expected = inputs_.front();
    StageComparison row;
    row.chained = difference(chained, expected, settings_);
    row.isolated = difference(isolated, expected, settings_);
    row.allowed = rounding_in_levels(settings_);
    if (!(isolated.shape() == expected.shape())) {
      row.remark =
          "shape " + isolated.shape().to_string() + " instead of " + expected.shape().to_string();
    }
    finish("normalised", std::move(row));
  }

  void finish(const char* stage, StageComparison row) {
    row.stage = stage;
    row.departs = row.isolated.largest > row.allowed;
    if (row.departs && result_.first_departure.empty()) result_.first_departure = stage;
    result_.stages.push_back(std::move(row));
  }

  void compare_outputs(const Tensor& ours) {
    if (!(ours.shape() == inputs_.front().shape())) {
      result_.input_relative_l2 = result_.output_relative_l2 = kInfinity;
      return;
    }
    PlanOptions plan = options_.plan;
    plan.input_shapes.clear();
    for (const Tensor& input : inputs_) plan.input_shapes.push_back(input.shape());
    Runner runner(Plan::make(graph_, weights_, plan));
    const auto output_of = [&] {
      runner.run(inputs_);
      return to_tensor(runner.output());
    };
    const Tensor theirs = output_of();
    result_.input_relative_l2 = measure_difference(ours, inputs_.front()).relative_l2;
    inputs_.front() = ours;
    const Tensor moved = output_of();
    result_.output_relative_l2 = measure_difference(moved, theirs).relative_l2;
    result_.reference_top = largest_at(theirs);
    result_.our_top = largest_at(moved);
  }

  static std::int64_t largest_at(const Tensor& tensor) {
    return std::ranges::max_element(tensor.values()) - tensor.values().begin();
  }

  const Preprocess& settings_;
  const Graph& graph_;
  const WeightMap& weights_;
  const ReferenceSource& reference_;
  const PictureCompareOptions& options_;
  std::vector<Tensor> inputs_;  // the reference's; the first is the picture's
  PictureComparison result_;
};

}  // namespace

PictureComparison compare_picture(const Picture& decoded, const Preprocess& preprocess,
                                  const Graph& graph, const WeightMap& weights,
                                  const ReferenceSource& reference,
                                  const PictureCompareOptions& options) {
  return Comparer(preprocess, graph, weights, reference, options).run(decoded);
}

}  // namespace leadsman
