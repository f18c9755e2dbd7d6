// The page of a sweep. Every figure carries the JSON pointer that it was taken from (data-json), so
// that a test can compare them; charts carry the ranges of their axes.
#include <algorithm>
#include <cmath>
#include <map>

#include <nlohmann/json.hpp>

#include "leadsman/sweep_report.h"
#include "measure/page_chart.h"

namespace leadsman {
namespace {

using measure::Axis;
using measure::escaped;
using measure::format;
using measure::Plot;
using measure::series_class;
using Json = nlohmann::ordered_json;

constexpr double kMiB = 1024.0 * 1024.0;

const char* const kStyle = R"(<style>
:root{--ink:#1d2328;--soft:#5b6670;--paper:#fbfaf7;--rule:#dcd9d0}
@media(prefers-color-scheme:dark){:root{--ink:#e8e6e0;--soft:#a3acb3;--paper:#171b1f;--rule:#343b41}}
@media print{:root{--ink:#000;--soft:#444;--paper:#fff;--rule:#ccc}figure,table{break-inside:avoid}}
body{print-color-adjust:exact;color:var(--ink);background:var(--paper);font:15px/1.5 system-ui,sans-serif;max-width:1240px;
margin:2rem auto;padding:0 1.5rem}h1{font-size:1.6rem;margin-bottom:0}h2{font-size:1.1rem;
margin:2rem 0 .4rem}p,figcaption{color:var(--soft);margin:.2rem 0}.charts{display:grid;gap:1.5rem;
grid-template-columns:repeat(auto-fit,minmax(min(100%,520px),1fr))}figure{margin:0}svg{width:100%;
fill:none}svg text{fill:var(--soft);font-size:12px}.grid{stroke:var(--rule)}polyline{stroke-width:2}
.roof{stroke:var(--ink)}.limit{stroke:var(--ink);stroke-dasharray:6 4}.band{opacity:.18;stroke:none}
table{border-collapse:collapse;font-variant-numeric:tabular-nums}td,th{padding:.15rem .8rem .15rem 0;
text-align:right;border-bottom:1px solid var(--rule)}td:first-child,th:first-child{text-align:left}
th{color:var(--soft);font-weight:500}.wide{overflow-x:auto}
.name{white-space:nowrap;margin-right:1em}.key{display:inline-block;width:.8em;height:.8em;margin-right:.35em;background:currentColor}
.s0{--c:#0072b2}.s1{--c:#d55e00}.s2{--c:#009e73}.s3{--c:#cc79a7}.s4{--c:#e69f00}.s5{--c:#56b4e9}
.s6{--c:#9a8f00}.s7{--c:#7f7f7f}polyline.curve{stroke:var(--c)}circle,rect,.band{fill:var(--c)}
.key{color:var(--c)}</style>)";

// A figure of the JSON, as the page shows it.
class Figures {
 public:
  explicit Figures(const Json& document) : document_(document) {}
  const Json& at(const std::string& path) const { return document_.at(Json::json_pointer(path)); }
  std::string show(const std::string& path, const char* pattern, double factor = 1.0) const {
    const Json& value = at(path);
    if (!value.is_number()) return "";
    return "<span data-json='" + path + "' data-factor='" + format("%.17g", factor) + "'>" +
           format(pattern, factor * value.get<double>()) + "</span>";
  }

 private:
  const Json& document_;
};

struct Series {
  std::string name;
  std::vector<std::string> paths;  ///< of its points, by size
};

std::vector<Series> series_of(const Json& document) {
  std::vector<Series> all;
  for (std::size_t i = 0; i < document["points"].size(); ++i) {
    const Json& point = document["points"][i];
    if (point.contains("failure")) continue;
    const std::string name = point["model"].get<std::string>() + ", " +
                             std::to_string(point["threads"].get<int>()) + " thr";
    auto found = std::ranges::find(all, name, &Series::name);
    if (found == all.end()) found = all.insert(all.end(), {name, {}});
    found->paths.push_back("/points/" + std::to_string(i));
  }
  return all;
}

class Page {
 public:
  explicit Page(const Json& document)
      : document_(document), figures_(document), series_(series_of(document)) {}

  std::string text() const {
    std::string html =
        "<!doctype html><html lang='en'><meta charset='utf-8'><meta name='viewport' "
        "content='width=device-width'><link rel='icon' href='data:,'><title>Sweep</title>";
    html += kStyle;
    html += "<h1>Latency, memory and limits by image size</h1>" + board();
    if (!series_.empty()) {
      html += "<div class='charts'>" + latency() + memory() + roofline() + families() + "</div>";
      html += points() + growth() + budget();
    }
    return html + "</html>\n";
  }

 private:
  double value(const std::string& path) const { return figures_.at(path).get<double>(); }
  std::string memory_path(const std::string& point) const {
    return point + (figures_.at(point + "/resident_bytes").is_null() ? "/predicted_bytes"
                                                                     : "/resident_bytes");
  }
  // Least and greatest of members of all points.
  std::pair<double, double> range(const std::vector<std::string>& members) const {
    double least = INFINITY;
    double most = 0.0;
    for (const Series& series : series_) {
      for (const std::string& path : series.paths) {
        for (const std::string& member : members) {
          least = std::min(least, value(path + member));
          most = std::max(most, value(path + member));
        }
      }
    }
    return {least, most};
  }
  Axis size_axis() const {
    const auto [least, most] = range({"/size"});
    Axis axis = measure::log_axis("side of the image, pixels", least, most);
    axis.ticks.clear();
    for (const std::string& path : series_.front().paths) {
      const double size = value(path + "/size");
      if (axis.ticks.empty() || size > 1.12 * axis.ticks.back()) axis.ticks.push_back(size);
    }
    return axis;
  }
  static std::string figure(const std::string& title, const std::string& note,
                            const std::string& chart) {
    return "<figure><h2>" + title + "</h2><figcaption>" + note + "</figcaption>" + chart +
           "</figure>";
  }

  std::string board() const {
    std::string html = "<p>" + escaped(document_["board"]["processor"].get<std::string>()) + ", " +
                       figures_.show("/board/usable_cpus", "%.0f") + " CPUs, " +
                       escaped(document_["board"]["instruction_set"].get<std::string>()) + ", " +
                       figures_.show("/board/memory_bytes", "%.1f", 1.0 / kMiB / 1024.0) +
                       " GiB memory</p>";
    for (std::size_t i = 0; i < document_["limits"].size(); ++i) {
      const std::string path = "/limits/" + std::to_string(i);
      html += "<p>threads " + figures_.show(path + "/threads", "%.0f") + ": peak " +
              figures_.show(path + "/peak_gflops", "%.1f") + " GFLOP/s, triad " +
              figures_.show(path + "/triad_gb_per_s", "%.1f") + " GB/s</p>";
    }
    if (!document_["complete"].get<bool>())
      html += "<p>Stopped before all sizes were measured.</p>";
    return html;
  }

  // A line with its dots and a label at its end.
  void draw(Plot& plot, std::size_t index, const std::vector<std::string>& y_paths,
            double factor) const {
    const Series& series = series_[index];
    std::vector<std::pair<double, double>> line;
    for (std::size_t i = 0; i < y_paths.size(); ++i) {
      line.emplace_back(value(series.paths[i] + "/size"), factor * value(y_paths[i]));
    }
    plot.line(line, "curve " + series_class(index));
    for (std::size_t i = 0; i < line.size(); ++i) {
      plot.dot(line[i].first, line[i].second, series_class(index), series.paths[i] + "/size",
               y_paths[i], factor);
    }
    plot.label(line.back().first, line.back().second, series.name);
  }

  std::string latency() const {
    const auto [least, most] = range({"/p50_ms", "/p99_ms"});
    Plot plot(size_axis(), measure::log_axis("milliseconds a run", least, most));
    for (std::size_t i = 0; i < series_.size(); ++i) {
      std::vector<std::string> medians;
      std::string band;
      for (const std::string& path : series_[i].paths) {
        medians.push_back(path + "/p50_ms");
        const double x = plot.x(value(path + "/size"));
        band += format("%.2f,", x) + format("%.2f ", plot.y(value(path + "/p99_ms")));
      }
      for (auto path = series_[i].paths.rbegin(); path != series_[i].paths.rend(); ++path) {
        band += format("%.2f,", plot.x(value(*path + "/size"))) +
                format("%.2f ", plot.y(value(*path + "/p50_ms")));
      }
      plot.add("<polygon class='band " + series_class(i) + "' points='" + band + "'/>");
      draw(plot, i, medians, 1.0);
    }
    return figure("Latency", "Median, and the band up to p99; both axes logarithmic.",
                  plot.svg("Latency against image size"));
  }

  std::string memory() const {
    double most = 0.0;
    for (const Series& series : series_) {
      for (const std::string& path : series.paths) {
        most = std::max(most, value(memory_path(path)) / kMiB);
      }
    }
    const Json& budget = document_["budget"];
    const bool limited = !budget.is_null() && budget["bytes"].is_number();
    if (limited) most = std::max(most, budget["bytes"].get<double>() / kMiB);
    Plot plot(size_axis(), measure::linear_axis("resident memory, MiB", most));
    const auto [first, last] = range({"/size"});
    if (limited) {
      const double limit = budget["bytes"].get<double>() / kMiB;
      plot.line({{first, limit}, {last, limit}}, "limit");
      plot.label(last, limit, "budget");
    }
    for (std::size_t i = 0; i < series_.size(); ++i) {
      std::vector<std::string> paths;
      for (const std::string& path : series_[i].paths) paths.push_back(memory_path(path));
      draw(plot, i, paths, 1.0 / kMiB);
    }
    return figure("Memory", "The most a process of its own held; the plan's where not measured.",
                  plot.svg("Memory against image size"));
  }

  std::string roofline() const {
    auto [low, high] = range({"/flop_per_byte"});
    auto [least, most] = range({"/gflops"});
    for (const Json& limits : document_["limits"]) {
      low = std::min(low, limits["ridge_flop_per_byte"].get<double>() / 2.0);
      high = std::max(high, limits["ridge_flop_per_byte"].get<double>() * 2.0);
      most = std::max(most, limits["peak_gflops"].get<double>());
    }
    Plot plot(measure::log_axis("FLOP a byte moved", low, high),
              measure::log_axis("GFLOP/s", least, most));
    for (const Json& limits : document_["limits"]) {
      const double peak = limits["peak_gflops"];
      const double triad = limits["triad_gb_per_s"];
      const double begin = std::max(low, least / triad);
      plot.line({{begin, std::min(peak, begin * triad)}, {peak / triad, peak}, {high, peak}},
                "roof");
    }
    for (std::size_t i = 0; i < series_.size(); ++i) {
      const std::string& last = series_[i].paths.back();
      for (const std::string& path : series_[i].paths) {
        plot.dot(value(path + "/flop_per_byte"), value(path + "/gflops"), series_class(i),
                 path + "/flop_per_byte", path + "/gflops");
      }
      plot.label(value(last + "/flop_per_byte"), value(last + "/gflops"), series_[i].name);
    }
    return figure(
        "Roofline",
        "Whole runs under the peak and the bandwidth measured here. Above the roof: fewer "
        "multiplications than the formula's, or data from a cache.",
        plot.svg("Roofline"));
  }

  std::string families() const {
    std::map<std::string, std::size_t> colours;
    std::string bars;
    std::string table;
    for (std::size_t i = 0; i < series_.size(); ++i) {
      const std::string& path = series_[i].paths.back();
      const Json& families = figures_.at(path + "/families");
      double x = 140.0;
      const double y = 10.0 + 30.0 * static_cast<double>(i);
      bars += "<text x='132' y='" + format("%.0f", y + 15) + "' text-anchor='end'>" +
              escaped(series_[i].name) + "</text>";
      for (std::size_t k = 0; k < families.size(); ++k) {
        const std::string share = path + "/families/" + std::to_string(k) + "/share";
        const std::string name = families[k]["family"];
        const std::size_t colour = colours.emplace(name, colours.size()).first->second;
        const double width = 480.0 * value(share);
        bars += "<rect class='" + series_class(colour) + "' height='22' y='" + format("%.0f", y) +
                "' x='" + format("%.3f", x) + "' width='" + format("%.3f", width) +
                "' data-share='" + share + "'/>";
        x += width;
        table += "<tr><td>" + escaped(series_[i].name + ": " + name) + "<td>" +
                 figures_.show(share, "%.1f", 100.0) + " %";
      }
    }
    std::string keys;
    for (const auto& entry : colours) {
      keys += "<span class='name'><i class='key " + series_class(entry.second) + "'></i>" +
              escaped(entry.first) + "</span> ";
    }
    return figure(
        "Where the time goes", "Share of the time by operator family, at the largest size.",
        "<svg viewBox='0 0 640 " +
            format("%.0f", 20.0 + 30.0 * static_cast<double>(series_.size())) +
            "' role='img' aria-label='Time by family'>" + bars + "</svg><p>" + keys +
            "</p><details><summary>Figures</summary><table>" + table + "</table></details>");
  }

  std::string points() const {
    std::string html =
        "<h2>All figures</h2><div class='wide'><table><tr><th>model<th>size<th>p50 ms<th>p99 ms"
        "<th>GFLOP/s<th>of roof<th>memory, MiB<th>by the plan<th>stable";
    for (const Series& series : series_) {
      for (const std::string& path : series.paths) {
        html += "<tr><td>" + escaped(series.name) + "<td>" + figures_.show(path + "/size", "%.0f") +
                "<td>" + figures_.show(path + "/p50_ms", "%.3f") + "<td>" +
                figures_.show(path + "/p99_ms", "%.3f") + "<td>" +
                figures_.show(path + "/gflops", "%.1f") + "<td>" +
                figures_.show(path + "/roof_fraction", "%.2f") + "<td>" +
                figures_.show(path + "/resident_bytes", "%.1f", 1.0 / kMiB) + "<td>" +
                figures_.show(path + "/predicted_bytes", "%.1f", 1.0 / kMiB) + "<td>" +
                (figures_.at(path + "/stable").get<bool>() ? "yes" : "no");
      }
    }
    return html + "</table></div>";
  }

  std::string growth() const {
    std::string html;
    for (std::size_t i = 0; i < document_["growth"].size(); ++i) {
      const Json& growth = document_["growth"][i];
      const std::string path = "/growth/" + std::to_string(i);
      html += "<p>" + escaped(growth["model"].get<std::string>()) + ", " +
              figures_.show(path + "/threads", "%.0f") +
              " thr: time grows with size to the power " +
              figures_.show(path + "/exponent", "%.2f") + " (" +
              figures_.show(path + "/exponent_interval/0", "%.2f") + " to " +
              figures_.show(path + "/exponent_interval/1", "%.2f") + ")";
      if (!growth["held_out"].is_null()) {
        html += "; size " + figures_.show(path + "/held_out/size", "%.0f") +
                " predicted from the others: " +
                figures_.show(path + "/held_out/predicted_ms", "%.3f") + " ms, measured " +
                figures_.show(path + "/held_out/measured_ms", "%.3f") + " ms";
      }
      html += "</p>";
    }
    return html.empty() ? "" : "<h2>Growth</h2>" + html;
  }

  std::string budget() const {
    if (document_["budget"].is_null()) return "";
    std::string html =
        "<h2>Budget</h2><table><tr><th>model<th>threads<th>largest size (0: none fits)<th>why not "
        "more";
    const Json& verdicts = document_["budget"]["verdicts"];
    for (std::size_t i = 0; i < verdicts.size(); ++i) {
      const std::string path = "/budget/verdicts/" + std::to_string(i);
      html += "<tr><td>" + escaped(verdicts[i]["model"].get<std::string>()) + "<td>" +
              figures_.show(path + "/threads", "%.0f") + "<td>" +
              figures_.show(path + "/largest_size", "%.0f") + "<td>" +
              escaped(verdicts[i]["reason"].get<std::string>());
    }
    return html + "</table>";
  }

  const Json& document_;
  Figures figures_;
  std::vector<Series> series_;
};

}  // namespace

std::string sweep_page(const std::string& json) {
  const Json document = Json::parse(json);
  return Page(document).text();
}

}  // namespace leadsman
