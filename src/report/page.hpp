#pragma once
// One self-contained HTML page: style, chart library, numbers and words in one file.

#include <nlohmann/json.hpp>
#include <string>
#include <vector>

#include "tapwright/report/figure.hpp"

namespace tapwright {

struct PageSection {
  std::string id;
  std::string title;
  std::string html;  ///< already escaped
};

struct Page {
  std::string title;
  std::string lead_html;  ///< under the title: verdict, what it is about
  std::vector<PageSection> sections;
  std::vector<Figure> figures;   ///< drawn where figure_html() put their places
  nlohmann::ordered_json extra;  ///< further members of the page's data
  bool with_trial = false;       ///< include the script of "try a setting"
};

[[nodiscard]] std::string page_html(const Page& page);

/// The place of one figure, with title, description and its numbers as a table for those who can't
/// see it.
[[nodiscard]] std::string figure_html(const Figure& figure);

struct TableOptions {
  std::string caption;
  bool sortable = false;
  std::vector<bool> numeric;  ///< per column: right-aligned
};
/// A table; cells are plain text and get escaped here. The first row is the head.
[[nodiscard]] std::string table_html(const std::vector<std::vector<std::string>>& rows,
                                     const TableOptions& options = {});

[[nodiscard]] std::string paragraph_html(const std::string& text);
[[nodiscard]] std::string list_html(const std::vector<std::string>& items);

}  // namespace tapwright
