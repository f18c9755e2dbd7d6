#include "picture_text.h"

#include <algorithm>
#include <cmath>
#include <ostream>

#include "text.h"

namespace leadsman::cli {
namespace {

using Json = nlohmann::ordered_json;

std::string verdict(const StageComparison& stage) {
  if (stage.departs) return stage.remark.empty() ? "DEPARTS" : "DEPARTS: " + stage.remark;
  if (stage.isolated.largest > 0.0) return stage.stage == "decoded" ? "the decoder" : "rounding";
  return stage.chained.largest > 0.0 ? "as it came" : "equal";
}

std::string label(std::int64_t index, const std::vector<std::string>& labels) {
  const auto at = static_cast<std::size_t>(index);
  return at < labels.size() ? labels[at] : "class " + std::to_string(index);
}

std::string levels_text(double levels) {
  return digits(levels, 2) + (levels == 1.0 ? " level" : " levels");
}

// What a difference of the inputs does to the answer.
std::string effect(const PictureComparison& comparison, const std::vector<std::string>& labels) {
  if (!std::isfinite(comparison.output_relative_l2)) return "the inputs differ in shape";
  const std::string ours = label(comparison.our_top, labels);
  return "the output moves by " + digits(comparison.output_relative_l2, 2) + " (relative), " +
         (comparison.our_top == comparison.reference_top
              ? "the top label stays " + ours
              : "the top label becomes " + ours + " instead of " +
                    label(comparison.reference_top, labels));
}

}  // namespace

void print_picture(std::ostream& out, const PictureComparison& comparison,
                   const std::vector<std::string>& labels) {
  using Align = Table::Align;
  Table table({{"stage"},
               {"levels", Align::kRight},
               {"differ", Align::kRight},
               {"alone", Align::kRight},
               {"differ", Align::kRight},
               {"allowed", Align::kRight},
               {""}});
  for (const StageComparison& stage : comparison.stages) {
    std::vector<std::string> cells{stage.stage,
                                   digits(stage.chained.largest, 2),
                                   fixed(100.0 * stage.chained.share, 1) + "%",
                                   digits(stage.isolated.largest, 2),
                                   fixed(100.0 * stage.isolated.share, 1) + "%",
                                   digits(stage.allowed, 2),
                                   verdict(stage)};
    if (stage.departs) {
      table.add_emphasized(std::move(cells));
    } else {
      table.add(std::move(cells));
    }
  }
  table.print(out);
  out << '\n';
  const StageComparison& decoded = comparison.stages.front();
  if (comparison.only_decoder_differs) {
    out << "only the decoder differs, by " << levels_text(decoded.isolated.largest) << " in "
        << fixed(100.0 * decoded.isolated.share, 1) << "% of the values\n";
  } else if (comparison.first_departure.empty()) {
    out << "every stage is the reference's\n";
    return;
  } else {
    out << emphasize("first stage that departs: " + comparison.first_departure) << '\n';
    if (decoded.departs) out << "(another decoder, or is it another picture?)\n";
  }
  out << effect(comparison, labels) << '\n';
}

Json picture_json(const PictureComparison& comparison, const std::string& file,
                  const std::vector<std::string>& labels) {
  Json document;
  document["file"] = file;
  document["stages"] = Json::array();
  for (const StageComparison& stage : comparison.stages) {
    Json row = {{"stage", stage.stage},
                {"largest_levels", stage.chained.largest},
                {"share", stage.chained.share},
                {"alone_largest_levels", stage.isolated.largest},
                {"alone_share", stage.isolated.share},
                {"allowed_levels", stage.allowed},
                {"departs", stage.departs}};
    if (!stage.remark.empty()) row["remark"] = stage.remark;
    document["stages"].push_back(std::move(row));
  }
  document["first_departure"] =
      comparison.first_departure.empty() ? Json(nullptr) : Json(comparison.first_departure);
  document["only_decoder_differs"] = comparison.only_decoder_differs;
  document["input_relative_l2"] = comparison.input_relative_l2;
  document["output_relative_l2"] = comparison.output_relative_l2;
  const bool known = std::isfinite(comparison.output_relative_l2);
  document["reference_label"] = known ? Json(label(comparison.reference_top, labels)) : Json();
  document["label"] = known ? Json(label(comparison.our_top, labels)) : Json();
  return document;
}

}  // namespace leadsman::cli
