#include "text.h"

#include <algorithm>
#include <array>
#include <cmath>
#include <cstdio>
#include <cstdlib>
#include <iostream>

#include <sys/ioctl.h>
#include <unistd.h>

namespace leadsman::cli {

int terminal_columns() {
  if (const char* columns = std::getenv("COLUMNS")) {
    const int given = std::atoi(columns);
    if (given > 0) return given;
  }
  winsize size{};
  if (isatty(STDOUT_FILENO) == 0) return 0;
  if (ioctl(STDOUT_FILENO, TIOCGWINSZ, &size) == 0 && size.ws_col > 0) return size.ws_col;
  return 80;
}

bool color_wanted() {
  const char* no_color = std::getenv("NO_COLOR");
  return isatty(STDOUT_FILENO) != 0 && (no_color == nullptr || no_color[0] == '\0');
}

std::string emphasize(const std::string& text) {
  return color_wanted() ? "\x1b[1m" + text + "\x1b[0m" : text;
}

std::string grouped(std::int64_t value) {
  std::string text = std::to_string(value);
  const std::size_t sign = value < 0 ? 1 : 0;
  for (std::size_t at = text.size(); at > sign + 3;) {
    at -= 3;
    text.insert(at, ",");
  }
  return text;
}

std::string counted(std::int64_t count, const std::string& noun) {
  return grouped(count) + " " + noun + (count == 1 ? "" : "s");
}

std::string digits(double value, int digits) {
  std::array<char, 64> buffer{};
  std::snprintf(buffer.data(), buffer.size(), "%.*g", digits, value);
  return buffer.data();
}

std::string fixed(double value, int decimals) {
  std::array<char, 64> buffer{};
  std::snprintf(buffer.data(), buffer.size(), "%.*f", decimals, value);
  return buffer.data();
}

namespace {

std::string three_digits(double value) {
  return fixed(value, value >= 99.95 ? 0 : value >= 9.995 ? 1 : 2);
}

std::string with_unit(double value, double base, const std::array<const char*, 5>& units) {
  std::size_t unit = 0;
  while (value >= base * 0.9995 && unit + 1 < units.size()) {
    value /= base;
    ++unit;
  }
  if (unit == 0) return digits(value, 6) + units[0];
  return three_digits(value) + units[unit];
}

}  // namespace

std::string scaled(double value) {
  return with_unit(value, 1000.0, {"", " k", " M", " G", " T"});
}

std::string bytes_text(double bytes) {
  return with_unit(bytes, 1024.0, {" B", " KiB", " MiB", " GiB", " TiB"});
}

std::string shape_text(const std::vector<std::int64_t>& sizes) {
  std::string text;
  for (const std::int64_t size : sizes) text += (text.empty() ? "" : "x") + std::to_string(size);
  return text;
}

std::string shortened(const std::string& text, std::size_t width) {
  if (text.size() <= width) return text;
  if (width < 4) return text.substr(text.size() - width);
  return ".." + text.substr(text.size() - (width - 2));
}

std::vector<std::size_t> Table::widths() const {
  std::vector<std::size_t> widths;
  for (const Column& column : columns_) widths.push_back(column.title.size());
  for (const Row& row : rows_) {
    for (std::size_t i = 0; i < widths.size(); ++i) {
      widths[i] = std::max(widths[i], row.cells[i].size());
    }
  }
  const auto limit = static_cast<std::size_t>(terminal_columns());
  if (limit == 0) return widths;
  std::size_t total = 2 * (widths.size() - 1);
  for (const std::size_t width : widths) total += width;
  constexpr std::size_t kNarrowest = 8;
  for (std::size_t i = 0; i < widths.size() && total > limit; ++i) {
    if (!columns_[i].may_shorten || widths[i] <= kNarrowest) continue;
    const std::size_t cut = std::min(total - limit, widths[i] - kNarrowest);
    widths[i] -= cut;
    total -= cut;
  }
  return widths;
}

void Table::print(std::ostream& out) const {
  const std::vector<std::size_t> width = widths();
  const auto line = [&](const std::vector<std::string>& cells) {
    std::string text;
    for (std::size_t i = 0; i < cells.size(); ++i) {
      const std::string cell = shortened(cells[i], width[i]);
      const std::string gap(width[i] - cell.size(), ' ');
      if (i > 0) text += "  ";
      text += columns_[i].align == Align::kRight ? gap + cell : cell + gap;
    }
    text.erase(text.find_last_not_of(' ') + 1);
    return text;
  };
  std::vector<std::string> titles;
  for (const Column& column : columns_) titles.push_back(column.title);
  out << emphasize(line(titles)) << '\n';
  for (const Row& row : rows_) {
    out << (row.emphasized ? emphasize(line(row.cells)) : line(row.cells)) << '\n';
  }
}

Progress::Progress(std::string what)
    : what_(std::move(what)), visible_(isatty(STDERR_FILENO) != 0) {}

Progress::~Progress() {
  clear();
}

void Progress::show(std::size_t done, std::size_t total) {
  if (!visible_) return;
  std::cerr << "\r\x1b[K" << what_ << ' ' << done << " of " << total << std::flush;
  dirty_ = true;
}

void Progress::show_share(double share) {
  if (!visible_) return;
  const std::chrono::duration<double> spent = std::chrono::steady_clock::now() - begin_;
  std::cerr << "\r\x1b[K" << what_ << ' ' << fixed(100.0 * share, 0) << " %";
  if (share > 0.0 && share < 1.0) {
    const double left = spent.count() * (1.0 - share) / share;
    std::cerr << ", about "
              << (left < 90.0 ? fixed(left, 0) + " s" : fixed(left / 60.0, 0) + " min") << " left";
  }
  std::cerr << std::flush;
  dirty_ = true;
}

void Progress::clear() {
  if (dirty_) std::cerr << "\r\x1b[K" << std::flush;
  dirty_ = false;
}

}  // namespace leadsman::cli
