#include <algorithm>
#include <cmath>
#include <limits>

#include "report/escape.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/report/figure.hpp"

namespace tapwright {
namespace {

constexpr double kWidth = 760.0;
constexpr double kHeight = 420.0;
constexpr double kTop = 44.0;
constexpr double kRight = 20.0;
constexpr double kBottom = 84.0;

struct Scale {
  double min = 0.0, max = 1.0, from = 0.0, to = 1.0;
  bool logarithmic = false;
  [[nodiscard]] double at(double value) const {
    const double share = logarithmic ? (std::log10(value) - std::log10(min)) /
                                           (std::log10(max) - std::log10(min))
                                     : (value - min) / (max - min);
    return from + share * (to - from);
  }
};

std::string number(double value) { return fixed(value, 2); }

std::string text_at(double x, double y, const std::string& anchor, const std::string& words,
                    const std::string& more = "") {
  return "<text x=\"" + number(x) + "\" y=\"" + number(y) + "\" text-anchor=\"" + anchor + "\"" + more +
         ">" + markup_escaped(words) + "</text>\n";
}

std::string line(double x1, double y1, double x2, double y2, const std::string& style) {
  return "<line x1=\"" + number(x1) + "\" y1=\"" + number(y1) + "\" x2=\"" + number(x2) + "\" y2=\"" +
         number(y2) + "\" " + style + "/>\n";
}

std::string rectangle(double x, double y, double width, double height, const std::string& style) {
  return "<rect x=\"" + number(x) + "\" y=\"" + number(y) + "\" width=\"" + number(width) +
         "\" height=\"" + number(height) + "\" " + style + "/>\n";
}

std::string tick_text(double value, bool logarithmic) {
  if (!logarithmic) return significant(value, 6);
  return "1e" + std::to_string(static_cast<int>(std::lround(std::log10(value))));
}

/// Range over all that the figure shows along one axis, with a margin where nothing is prescribed.
struct Range {
  double min = std::numeric_limits<double>::infinity();
  double max = -std::numeric_limits<double>::infinity();
  void take(double v, bool logarithmic) {
    if (!std::isfinite(v) || (logarithmic && v <= 0.0)) return;
    min = std::min(min, v);
    max = std::max(max, v);
  }
  void finish(const Axis& axis, double margin) {
    if (!(min <= max)) min = axis.logarithmic ? 0.1 : 0.0, max = 1.0;
    if (axis.logarithmic) {
      min = std::pow(10.0, std::floor(std::log10(min)));
      max = std::pow(10.0, std::ceil(std::log10(max)));
      if (max <= min) max = 10.0 * min;
    } else {
      if (max <= min) min -= 0.5, max += 0.5;
      const double pad = margin * (max - min);
      min -= pad;
      max += pad;
    }
    if (axis.min) min = *axis.min;
    if (axis.max) max = *axis.max;
  }
};

/// A field as one rectangle for each run of equal shade in a column; 16 shades.
std::string field_svg(const Field& field, const Scale& x, const Scale& y) {
  constexpr int kShades = 16;
  const Eigen::Index rows = field.log10_value.rows();
  const Eigen::Index columns = field.log10_value.cols();
  const double top = field.log10_value.maxCoeff();
  const auto shade = [&](Eigen::Index r, Eigen::Index c) {
    const double share = (field.log10_value(r, c) - field.floor) / (top - field.floor);
    return std::isfinite(share) ? std::clamp(static_cast<int>(std::ceil(share * kShades)), 0, kShades) : 0;
  };
  const double step_x = columns > 1 ? (field.x_max - field.x_min) / static_cast<double>(columns - 1) : 1.0;
  const double step_y = rows > 1 ? (field.y_max - field.y_min) / static_cast<double>(rows - 1) : 1.0;
  std::string out = "<g clip-path=\"url(#plot)\" shape-rendering=\"crispEdges\">\n";
  for (Eigen::Index c = 0; c < columns; ++c) {
    for (Eigen::Index r = 0; r < rows;) {
      const int s = shade(r, c);
      Eigen::Index end = r + 1;
      while (end < rows && shade(end, c) == s) ++end;
      if (s > 0) {
        const double centre_x = field.x_min + static_cast<double>(c) * step_x;
        const double left = x.at(centre_x - step_x / 2);
        const double right = x.at(centre_x + step_x / 2);
        const double low = y.at(field.y_min + (static_cast<double>(r) - 0.5) * step_y);
        const double high = y.at(field.y_min + (static_cast<double>(end) - 0.5) * step_y);
        out += rectangle(left, high, right - left, low - high,
                         "fill=\"" + palette()[0] + "\" fill-opacity=\"" +
                             fixed(static_cast<double>(s) / kShades, 3) + "\"");
      }
      r = end;
    }
  }
  return out + "</g>\n";
}

std::string series_svg(const Series& series, const Scale& x, const Scale& y) {
  const std::string& colour = palette()[static_cast<std::size_t>(series.colour) % palette().size()];
  const std::string dash = series.dashed ? " stroke-dasharray=\"6 4\"" : "";
  std::string out;
  if (series.kind == Series::Kind::kLine) {
    std::string path;
    bool open = false;
    for (Eigen::Index i = 0; i < series.x.size(); ++i) {
      const bool gap = !std::isfinite(series.y[i]) || (y.logarithmic && series.y[i] <= 0.0);
      if (!gap) {
        path += (open ? "L" : "M") + number(x.at(series.x[i])) + " " + number(y.at(series.y[i]));
      }
      open = !gap;
    }
    return "<path d=\"" + path + "\" fill=\"none\" stroke=\"" + colour + "\" stroke-width=\"1.6\"" + dash +
           " clip-path=\"url(#plot)\"/>\n";
  }
  for (Eigen::Index i = 0; i < series.x.size(); ++i) {
    if (!std::isfinite(series.y[i])) continue;
    const double px = x.at(series.x[i]);
    const double py = y.at(series.y[i]);
    if (series.kind == Series::Kind::kStems) {
      out += line(px, y.at(0.0), px, py, "stroke=\"" + colour + "\" stroke-width=\"1.2\"");
    }
    out += "<circle cx=\"" + number(px) + "\" cy=\"" + number(py) + "\" r=\"2.6\" fill=\"" + colour + "\"/>\n";
  }
  return "<g clip-path=\"url(#plot)\">\n" + out + "</g>\n";
}

constexpr const char* kInk = "#1c2430";
constexpr const char* kFaint = "#d5dae1";
constexpr const char* kGuide = "#5a6472";

std::string head(const Figure& figure) {
  return "<svg xmlns=\"http://www.w3.org/2000/svg\" viewBox=\"0 0 760 420\" width=\"760\" height=\"420\" "
         "role=\"img\" aria-labelledby=\"t d\" font-family=\"system-ui, Segoe UI, Helvetica, Arial, "
         "sans-serif\" font-size=\"12\" fill=\"" + std::string(kInk) + "\">\n<title id=\"t\">" +
         markup_escaped(figure.title) + "</title>\n<desc id=\"d\">" + markup_escaped(figure.summary) +
         "</desc>\n" + rectangle(0, 0, kWidth, kHeight, "fill=\"#ffffff\"") +
         text_at(16, 24, "start", figure.title, " font-size=\"15\" font-weight=\"600\"");
}

struct LegendEntry {
  std::string name;
  int colour = -1;  ///< -1 = guide, -2 = box
  bool dashed = false;
};

std::string legend(const std::vector<LegendEntry>& entries) {
  std::string out;
  double at = 16.0;
  double row = kHeight - 34.0;
  for (const LegendEntry& entry : entries) {
    if (entry.name.empty()) continue;
    const double width = 36.0 + 6.6 * static_cast<double>(entry.name.size());
    if (at > 16.0 && at + width > kWidth - 10.0) {
      at = 16.0;
      row += 18.0;
    }
    const std::string colour =
        entry.colour >= 0 ? palette()[static_cast<std::size_t>(entry.colour) % palette().size()]
                          : std::string(kGuide);
    const std::string dash = entry.dashed || entry.colour == -1 ? " stroke-dasharray=\"6 4\"" : "";
    out += line(at, row - 4, at + 20, row - 4, "stroke=\"" + colour + "\" stroke-width=\"3\"" + dash);
    out += text_at(at + 26, row, "start", entry.name);
    at += width;
  }
  return out;
}

std::string bars_svg(const Figure& figure) {
  const Bars& bars = *figure.bars;
  std::size_t longest = 4;
  for (const std::string& name : bars.names) longest = std::max(longest, name.size());
  const double left = std::min(20.0 + 6.8 * static_cast<double>(longest), 280.0);
  Range range;
  range.take(0.0, false);
  for (const Bars::Group& group : bars.groups) {
    for (const double v : group.to) range.take(v, false);
    for (const double v : group.from) range.take(v, false);
  }
  for (const Guide& guide : figure.guides) range.take(guide.at, false);
  range.finish(figure.x, 0.04);
  const Scale x{range.min, range.max, left, kWidth - kRight, false};
  std::string out = head(figure);
  for (const double t : ticks(x.min, x.max, 8, false)) {
    out += line(x.at(t), kTop, x.at(t), kHeight - kBottom, "stroke=\"" + std::string(kFaint) + "\"");
    out += text_at(x.at(t), kHeight - kBottom + 16, "middle", tick_text(t, false));
  }
  out += text_at((left + kWidth - kRight) / 2, kHeight - kBottom + 33, "middle", figure.x.label);
  const double pitch = (kHeight - kBottom - kTop) / std::max<double>(1.0, static_cast<double>(bars.names.size()));
  const double beside = bars.overlaid ? 1.0 : static_cast<double>(std::max<std::size_t>(1, bars.groups.size()));
  const double thick = std::min(22.0, 0.8 * pitch / beside);
  for (std::size_t i = 0; i < bars.names.size(); ++i) {
    const double middle = kTop + (static_cast<double>(i) + 0.5) * pitch;
    std::string name = bars.names[i];
    if (name.size() > 38) name = name.substr(0, 36) + "...";
    out += text_at(left - 8, middle + 4, "end", name);
    for (std::size_t g = 0; g < bars.groups.size(); ++g) {
      const Bars::Group& group = bars.groups[g];
      const auto at = static_cast<Eigen::Index>(i);
      if (!std::isfinite(group.to[at])) continue;
      const double from = x.at(group.from.size() > 0 ? group.from[at] : 0.0);
      const double to = x.at(group.to[at]);
      const double y = middle + ((bars.overlaid ? 0.0 : static_cast<double>(g)) - beside / 2) * thick;
      out += rectangle(std::min(from, to), y, std::max(1.0, std::abs(to - from)), thick - 1,
                       "fill=\"" + palette()[static_cast<std::size_t>(group.colour) % palette().size()] + "\"");
    }
  }
  out += line(x.at(0.0), kTop, x.at(0.0), kHeight - kBottom, "stroke=\"" + std::string(kInk) + "\"");
  std::vector<LegendEntry> entries;
  for (const Bars::Group& group : bars.groups) entries.push_back({group.name, group.colour, false});
  for (const Guide& guide : figure.guides) {
    out += line(x.at(guide.at), kTop, x.at(guide.at), kHeight - kBottom,
                "stroke=\"" + std::string(kGuide) + "\" stroke-dasharray=\"6 4\"");
    entries.push_back({guide.name, -1, true});
  }
  return out + legend(entries) + "</svg>\n";
}

}  // namespace

const std::vector<std::string>& palette() {
  static const std::vector<std::string> colours = {"#0072b2", "#d55e00", "#007f5f",
                                                   "#a8478a", "#8a6d00", "#3a7ca5"};
  return colours;
}

std::vector<double> ticks(double min, double max, int wanted, bool logarithmic) {
  std::vector<double> out;
  if (!(max > min) || !std::isfinite(max - min)) return out;
  if (logarithmic) {
    if (!(min > 0.0)) return out;
    const int first = static_cast<int>(std::ceil(std::log10(min) - 1e-9));
    const int last = static_cast<int>(std::floor(std::log10(max) + 1e-9));
    const int step = std::max(1, (last - first + wanted - 1) / std::max(1, wanted));
    for (int e = first; e <= last; e += step) out.push_back(std::pow(10.0, e));
    return out;
  }
  const double raw = (max - min) / std::max(1, wanted);
  const double power = std::pow(10.0, std::floor(std::log10(raw)));
  const double step = raw / power < 1.5 ? power : raw / power < 3.5 ? 2 * power : raw / power < 7.5 ? 5 * power : 10 * power;
  for (double k = std::ceil(min / step - 1e-9); k * step <= max + 1e-9 * step; k += 1.0) {
    out.push_back(k == 0.0 ? 0.0 : k * step);
  }
  return out;
}

std::string svg_of(const Figure& figure) {
  if (figure.bars) return bars_svg(figure);
  constexpr double kLeft = 76.0;
  Range rx;
  Range ry;
  for (const Series& s : figure.series) {
    for (const double v : s.x) rx.take(v, figure.x.logarithmic);
    for (const double v : s.y) ry.take(v, figure.y.logarithmic);
  }
  for (const Guide& g : figure.guides) (g.vertical ? rx : ry).take(g.at, (g.vertical ? figure.x : figure.y).logarithmic);
  for (const Box& b : figure.boxes) {
    for (const double v : {b.x_min, b.x_max}) rx.take(v, false);
    for (const double v : {b.y_min, b.y_max}) ry.take(v, false);
  }
  if (figure.field) {
    for (const double v : {figure.field->x_min, figure.field->x_max}) rx.take(v, false);
    for (const double v : {figure.field->y_min, figure.field->y_max}) ry.take(v, false);
  }
  rx.finish(figure.x, 0.0);
  ry.finish(figure.y, 0.05);
  const Scale x{rx.min, rx.max, kLeft, kWidth - kRight, figure.x.logarithmic};
  const Scale y{ry.min, ry.max, kHeight - kBottom, kTop, figure.y.logarithmic};
  std::string out = head(figure);
  out += "<clipPath id=\"plot\">" + rectangle(kLeft, kTop, kWidth - kRight - kLeft, kHeight - kBottom - kTop, "") + "</clipPath>\n";
  if (figure.field) out += field_svg(*figure.field, x, y);
  for (const double t : ticks(x.min, x.max, 9, x.logarithmic)) {
    out += line(x.at(t), kTop, x.at(t), kHeight - kBottom, "stroke=\"" + std::string(kFaint) + "\" stroke-width=\"0.8\"");
    out += text_at(x.at(t), kHeight - kBottom + 16, "middle", tick_text(t, x.logarithmic));
  }
  for (const double t : ticks(y.min, y.max, 7, y.logarithmic)) {
    out += line(kLeft, y.at(t), kWidth - kRight, y.at(t), "stroke=\"" + std::string(kFaint) + "\" stroke-width=\"0.8\"");
    out += text_at(kLeft - 6, y.at(t) + 4, "end", tick_text(t, y.logarithmic));
  }
  out += text_at((kLeft + kWidth - kRight) / 2, kHeight - kBottom + 33, "middle", figure.x.label);
  out += text_at(0, 0, "middle", figure.y.label,
                 " transform=\"translate(18 " + number((kTop + kHeight - kBottom) / 2) + ") rotate(-90)\"");
  std::vector<LegendEntry> entries;
  if (figure.field) entries.push_back({figure.field->name, 0, false});
  for (const Series& s : figure.series) {
    out += series_svg(s, x, y);
    entries.push_back({s.name, s.colour, s.dashed});
  }
  for (const Box& b : figure.boxes) {
    out += rectangle(x.at(b.x_min), y.at(b.y_max), x.at(b.x_max) - x.at(b.x_min), y.at(b.y_min) - y.at(b.y_max),
                     "fill=\"" + std::string(kGuide) + "\" fill-opacity=\"0.18\" stroke=\"" + kGuide + "\"");
    entries.push_back({b.name, -2, false});
  }
  for (const Guide& g : figure.guides) {
    const std::string style = "stroke=\"" + std::string(kGuide) + "\" stroke-dasharray=\"6 4\"";
    out += g.vertical ? line(x.at(g.at), kTop, x.at(g.at), kHeight - kBottom, style)
                      : line(kLeft, y.at(g.at), kWidth - kRight, y.at(g.at), style);
    entries.push_back({g.name, -1, true});
  }
  out += rectangle(kLeft, kTop, kWidth - kRight - kLeft, kHeight - kBottom - kTop, "fill=\"none\" stroke=\"" + std::string(kInk) + "\"");
  return out + legend(entries) + "</svg>\n";
}

}  // namespace tapwright
