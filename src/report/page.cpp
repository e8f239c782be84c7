#include "report/page.hpp"

#include <algorithm>
#include <cmath>

#include "report/escape.hpp"
#include "report/figure_json.hpp"
#include "report/page_assets.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/report/solution_report.hpp"

namespace tapwright {
namespace {

std::string cell_text(double value) { return std::isfinite(value) ? significant(value, 5) : ""; }

/// The figure's numbers as a table, thinned to at most 40 rows a curve.
std::string numbers_html(const Figure& figure) {
  constexpr Eigen::Index kMostRows = 40;
  std::string out = "<details><summary>Numbers</summary><div class=\"scroll\">";
  if (figure.bars) {
    std::vector<std::vector<std::string>> rows{{""}};
    for (const Bars::Group& g : figure.bars->groups) rows[0].push_back(g.name);
    for (std::size_t i = 0; i < figure.bars->names.size(); ++i) {
      rows.push_back({figure.bars->names[i]});
      for (const Bars::Group& g : figure.bars->groups) {
        const auto at = static_cast<Eigen::Index>(i);
        rows.back().push_back(cell_text(g.to[at] - (g.from.size() > 0 ? g.from[at] : 0.0)));
      }
    }
    return out + table_html(rows, {figure.x.label, false, {}}) + "</div></details>";
  }
  for (const Series& s : figure.series) {
    std::vector<std::vector<std::string>> rows{{figure.x.label, figure.y.label}};
    const Eigen::Index step = std::max<Eigen::Index>(1, (s.x.size() + kMostRows - 1) / kMostRows);
    for (Eigen::Index i = 0; i < s.x.size(); i += step) {
      if (std::isfinite(s.y[i])) rows.push_back({cell_text(s.x[i]), cell_text(s.y[i])});
    }
    out += table_html(rows, {s.name, false, {true, true}});
  }
  return out + "</div></details>";
}

}  // namespace

std::string paragraph_html(const std::string& text) {
  return "<p>" + markup_escaped(text) + "</p>\n";
}

std::string list_html(const std::vector<std::string>& items) {
  if (items.empty()) return "";
  std::string out = "<ul>\n";
  for (const std::string& item : items) out += "<li class=\"name\">" + markup_escaped(item) + "</li>\n";
  return out + "</ul>\n";
}

std::string table_html(const std::vector<std::vector<std::string>>& rows, const TableOptions& options) {
  const auto style = [&](std::size_t column) {
    const bool numeric = column < options.numeric.size() ? options.numeric[column] : column > 0;
    return numeric ? std::string(" class=\"n\"") : std::string(" class=\"name\"");
  };
  std::string out = std::string("<div class=\"scroll\" tabindex=\"0\"><table") +
                    (options.sortable ? " class=\"sortable\"" : "") + ">\n";
  if (!options.caption.empty()) out += "<caption>" + markup_escaped(options.caption) + "</caption>\n";
  for (std::size_t r = 0; r < rows.size(); ++r) {
    out += r == 0 ? "<thead><tr>" : r == 1 ? "<tbody>\n<tr>" : "<tr>";
    for (std::size_t c = 0; c < rows[r].size(); ++c) {
      if (r == 0) {
        out += "<th scope=\"col\"" + style(c) + (options.sortable ? " data-sort" : "") + ">" +
               markup_escaped(rows[r][c]) + "</th>";
      } else if (c == 0) {
        out += "<th scope=\"row\"" + style(c) + ">" + markup_escaped(rows[r][c]) + "</th>";
      } else {
        out += "<td" + style(c) + ">" + markup_escaped(rows[r][c]) + "</td>";
      }
    }
    out += r == 0 ? "</tr></thead>\n" : "</tr>\n";
  }
  if (rows.size() > 1) out += "</tbody>";
  return out + "</table></div>\n";
}

std::string figure_html(const Figure& figure) {
  return "<figure id=\"" + figure.id + "\"><h3>" + markup_escaped(figure.title) +
         "</h3><div class=\"plot\"><canvas role=\"img\" aria-label=\"" +
         markup_escaped(figure.title + ". " + figure.summary) + "\"></canvas></div><figcaption>" +
         markup_escaped(figure.summary) + "</figcaption>" + numbers_html(figure) + "</figure>\n";
}

std::string page_html(const Page& page) {
  nlohmann::ordered_json data = page.extra.is_object() ? page.extra : nlohmann::ordered_json::object();
  data["figures"] = nlohmann::ordered_json::array();
  for (const Figure& figure : page.figures) data["figures"].push_back(json_object_of(figure));

  std::string out =
      "<!DOCTYPE html>\n<html lang=\"en\">\n<head>\n<meta charset=\"utf-8\">\n"
      "<meta name=\"viewport\" content=\"width=device-width, initial-scale=1\">\n"
      "<meta name=\"color-scheme\" content=\"light dark\">\n<link rel=\"icon\" href=\"data:,\">\n"
      "<title>" + markup_escaped(page.title) + "</title>\n<style>\n" + std::string(kPageStyle) +
      "</style>\n</head>\n<body>\n<header>\n<h1>" + markup_escaped(page.title) + "</h1>\n" + page.lead_html +
      "<nav aria-label=\"Sections\"><ul>\n";
  for (const PageSection& s : page.sections) {
    out += "<li><a href=\"#" + s.id + "\">" + markup_escaped(s.title) + "</a></li>\n";
  }
  out += "</ul></nav>\n</header>\n<main>\n";
  for (const PageSection& s : page.sections) {
    out += "<section id=\"" + s.id + "\">\n<h2>" + markup_escaped(s.title) + "</h2>\n" + s.html + "</section>\n";
  }
  out += "</main>\n<footer>" + paragraph_html(caution()) + paragraph_html("Written by tapwright " TAPWRIGHT_VERSION
         ". Charts by Chart.js, MIT licence.") + "</footer>\n<script type=\"application/json\" id=\"page-data\">" +
         script_escaped(data.dump(-1, ' ', false, nlohmann::ordered_json::error_handler_t::replace)) +
         "</script>\n<script>\n" + std::string(kChartLibrary) + "\n</script>\n<script>\n" + std::string(kPageScript) +
         "</script>\n";
  if (page.with_trial) out += "<script>\n" + std::string(kTrialScript) + "</script>\n";
  return out + "</body>\n</html>\n";
}

}  // namespace tapwright
