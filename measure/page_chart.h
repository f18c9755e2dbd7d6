// Charts of a sweep's page: a plot with two axes, drawn as inline SVG.
#pragma once

#include <string>
#include <utility>
#include <vector>

namespace leadsman::measure {

/// Text with the characters that HTML reserves replaced.
std::string escaped(const std::string& text);
/// printf with one double.
std::string format(const char* pattern, double value);
/// Colour class of a series: "s0" to "s7" (the page's style has them, after Okabe & Ito 2008).
std::string series_class(std::size_t index);

struct Axis {
  std::string label;  ///< with its unit
  double low = 0.0;
  double high = 1.0;
  bool logarithmic = false;
  std::vector<double> ticks;

  double share(double value) const;  ///< of the axis' length at which `value` lies
};
/// From 0 to a round number above `most`.
Axis linear_axis(const std::string& label, double most);
/// Around positive values, with ticks at 1, 2 and 5 of each decade.
Axis log_axis(const std::string& label, double least, double most);

/// A plot of 640 x 380; `body` may use x() and y(), in the SVG's units.
class Plot {
 public:
  Plot(Axis x, Axis y) : x_(std::move(x)), y_(std::move(y)) {}
  double x(double value) const;
  double y(double value) const;
  void add(const std::string& svg) { body_ += svg; }
  /// A line through points of the chart's values.
  void line(const std::vector<std::pair<double, double>>& points, const std::string& style);
  /// The dot of one measurement. `x_path` and `y_path` are the JSON pointers of its values, which
  /// are multiplied by the factors.
  void dot(double x_value, double y_value, const std::string& style, const std::string& x_path,
           const std::string& y_path, double y_factor = 1.0);
  /// Text right of a point, moved down where another label stands.
  void label(double x_value, double y_value, const std::string& text);
  std::string svg(const std::string& title) const;

 private:
  Axis x_, y_;
  std::string body_;
  std::vector<std::pair<double, double>> labels_;  ///< where they stand
};

}  // namespace leadsman::measure
