// Text for people: numbers, tables, and what the terminal can show.
#pragma once

#include <chrono>
#include <cstdint>
#include <iosfwd>
#include <string>
#include <vector>

namespace leadsman::cli {

/// Columns of the terminal behind stdout; 0 when it is no terminal (then nothing is shortened).
/// COLUMNS overrides.
int terminal_columns();
/// True when stdout is a terminal and NO_COLOR is not set.
bool color_wanted();
/// `text` in bold where color_wanted().
std::string emphasize(const std::string& text);

/// "11,689,512"
std::string grouped(std::int64_t value);
/// "1 run", "50 runs"
std::string counted(std::int64_t count, const std::string& noun);
/// Three significant digits with a unit: "1.81 G", "3.50 M", "640".
std::string scaled(double value);
/// "44.6 MiB", "640 B"
std::string bytes_text(double bytes);
/// Shape joined by x: "1x64x56x56".
std::string shape_text(const std::vector<std::int64_t>& sizes);
/// printf("%.*g") with `digits` significant digits.
std::string digits(double value, int digits);
/// printf("%.*f") with `decimals` digits behind the point.
std::string fixed(double value, int decimals);
/// The end of `text`, which tells layers and files apart, in `width` characters.
std::string shortened(const std::string& text, std::size_t width);

/// Columns of text, right- or left-aligned. One column may give way when the terminal is narrow.
class Table {
 public:
  enum class Align { kLeft, kRight };
  struct Column {
    std::string title;
    Align align = Align::kLeft;
    bool may_shorten = false;
  };

  explicit Table(std::vector<Column> columns) : columns_(std::move(columns)) {}
  /// Requires as many cells as columns.
  void add(std::vector<std::string> cells) { rows_.push_back({std::move(cells), false}); }
  void add_emphasized(std::vector<std::string> cells) { rows_.push_back({std::move(cells), true}); }
  void print(std::ostream& out) const;

 private:
  struct Row {
    std::vector<std::string> cells;
    bool emphasized;
  };
  std::vector<std::size_t> widths() const;

  std::vector<Column> columns_;
  std::vector<Row> rows_;
};

/// A line on stderr that is rewritten; silent when stderr is no terminal.
class Progress {
 public:
  explicit Progress(std::string what);
  ~Progress();
  void show(std::size_t done, std::size_t total);
  /// `share` in [0, 1] of the work, and the time left at the pace so far.
  void show_share(double share);
  /// Clears the line, so that a message can be written in its place.
  void clear();

 private:
  std::string what_;
  std::chrono::steady_clock::time_point begin_ = std::chrono::steady_clock::now();
  bool visible_;
  bool dirty_ = false;
};

}  // namespace leadsman::cli
