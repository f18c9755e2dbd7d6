#include "measure/page_chart.h"

#include <algorithm>
#include <cmath>
#include <cstdio>

namespace leadsman::measure {
namespace {

constexpr double kLeft = 62, kTop = 14, kWidth = 460, kHeight = 310;

std::string number(double value) {
  return format("%.6g", value);
}

std::string text_at(double x, double y, const char* anchor, const std::string& text) {
  return "<text x='" + number(x) + "' y='" + number(y) + "' text-anchor='" + anchor + "'>" +
         escaped(text) + "</text>";
}

}  // namespace

std::string escaped(const std::string& text) {
  std::string safe;
  for (const char c : text) {
    switch (c) {
      case '&':
        safe += "&amp;";
        break;
      case '<':
        safe += "&lt;";
        break;
      case '>':
        safe += "&gt;";
        break;
      case '\'':
        safe += "&#39;";
        break;
      case '"':
        safe += "&quot;";
        break;
      default:
        safe += c;
    }
  }
  return safe;
}

std::string format(const char* pattern, double value) {
  char text[64];
  std::snprintf(text, sizeof text, pattern, value);
  return text;
}

std::string series_class(std::size_t index) {
  return "s" + std::to_string(index % 8);
}

double Axis::share(double value) const {
  if (logarithmic) return std::log(value / low) / std::log(high / low);
  return (value - low) / (high - low);
}

Axis linear_axis(const std::string& label, double most) {
  const double decade = std::pow(10.0, std::floor(std::log10(most / 4.0)));
  double step = decade;
  for (const double factor : {1.0, 2.0, 5.0, 10.0}) {
    step = factor * decade;
    if (most <= 5.0 * step) break;
  }
  Axis axis{label, 0.0, step * std::ceil(most / step), false, {}};
  for (int i = 0; i * step <= axis.high * 1.001; ++i) axis.ticks.push_back(i * step);
  return axis;
}

Axis log_axis(const std::string& label, double least, double most) {
  Axis axis{label, least / 1.15, most * 1.15, true, {}};
  for (double decade = std::pow(10.0, std::floor(std::log10(axis.low))); decade <= axis.high;
       decade *= 10.0) {
    for (const double factor : {1.0, 2.0, 5.0}) {
      const double tick = factor * decade;
      if (tick >= axis.low && tick <= axis.high) axis.ticks.push_back(tick);
    }
  }
  return axis;
}

double Plot::x(double value) const {
  return kLeft + kWidth * x_.share(value);
}

double Plot::y(double value) const {
  return kTop + kHeight * (1.0 - y_.share(value));
}

void Plot::line(const std::vector<std::pair<double, double>>& points, const std::string& style) {
  body_ += "<polyline class='" + style + "' points='";
  for (const auto& point : points)
    body_ += number(x(point.first)) + "," + number(y(point.second)) + " ";
  body_ += "'/>";
}

void Plot::dot(double x_value, double y_value, const std::string& style, const std::string& x_path,
               const std::string& y_path, double y_factor) {
  body_ += "<circle r='3.5' class='" + style + "' cx='" + format("%.3f", x(x_value)) + "' cy='" +
           format("%.3f", y(y_value)) + "' data-x='" + x_path + "' data-y='" + y_path +
           "' data-factor='" + format("%.17g", y_factor) + "'/>";
}

void Plot::label(double x_value, double y_value, const std::string& text) {
  constexpr double kApart = 13.0;
  const double left = x(x_value) + 8;
  double height = y(y_value) + 4;
  // Below those that it would cover.
  for (bool moved = true; moved;) {
    moved = false;
    for (const auto& other : labels_) {
      if (std::abs(other.first - left) < 90.0 && std::abs(other.second - height) < kApart - 0.5) {
        height = other.second + kApart;
        moved = true;
      }
    }
  }
  labels_.emplace_back(left, height);
  body_ += text_at(left, height, "start", text);
}

std::string Plot::svg(const std::string& title) const {
  const auto axis_data = [](const char* name, const Axis& axis, double begin, double end) {
    return std::string(" data-") + name + "='" + format("%.17g", axis.low) + " " +
           format("%.17g", axis.high) + " " + (axis.logarithmic ? "log" : "linear") + " " +
           number(begin) + " " + number(end) + "'";
  };
  std::string svg = "<svg viewBox='0 0 640 380' role='img' aria-label='" + escaped(title) + "'" +
                    axis_data("xaxis", x_, kLeft, kLeft + kWidth) +
                    axis_data("yaxis", y_, kTop + kHeight, kTop) + ">";
  for (const double tick : x_.ticks) {
    svg += "<line class='grid' x1='" + number(x(tick)) + "' x2='" + number(x(tick)) + "' y1='" +
           number(kTop) + "' y2='" + number(kTop + kHeight) + "'/>" +
           text_at(x(tick), kTop + kHeight + 16, "middle", number(tick));
  }
  for (const double tick : y_.ticks) {
    svg += "<line class='grid' x1='" + number(kLeft) + "' x2='" + number(kLeft + kWidth) +
           "' y1='" + number(y(tick)) + "' y2='" + number(y(tick)) + "'/>" +
           text_at(kLeft - 6, y(tick) + 4, "end", number(tick));
  }
  svg += text_at(kLeft + kWidth / 2, 375, "middle", x_.label);
  svg += "<text transform='translate(14 " + number(kTop + kHeight / 2) +
         ") rotate(-90)' text-anchor='middle'>" + escaped(y_.label) + "</text>";
  return svg + body_ + "</svg>";
}

}  // namespace leadsman::measure
