#include "report/text_table.hpp"

#include <algorithm>
#include <sstream>

namespace tapwright {
namespace {

/// Columns that UTF-8 text takes, a code point counted as one.
std::size_t columns_of(const std::string& text) {
  return static_cast<std::size_t>(std::count_if(
      text.begin(), text.end(), [](char c) { return (static_cast<unsigned char>(c) & 0xC0) != 0x80; }));
}

}  // namespace

std::string table_text(const std::vector<std::vector<std::string>>& rows) {
  std::vector<std::size_t> widths;
  for (const auto& row : rows) {
    if (widths.size() < row.size()) widths.resize(row.size());
    for (std::size_t i = 0; i < row.size(); ++i) widths[i] = std::max(widths[i], columns_of(row[i]));
  }
  std::string text;
  for (const auto& row : rows) {
    std::string line;
    for (std::size_t i = 0; i < row.size(); ++i) {
      const std::string pad(widths[i] - columns_of(row[i]), ' ');
      line += "  " + (i == 0 ? row[i] + pad : pad + row[i]);
    }
    line.erase(line.find_last_not_of(' ') + 1);
    text += line + '\n';
  }
  return text;
}

std::string item_text(const std::string& first, const std::string& text) {
  constexpr std::size_t kWidth = 80;
  std::istringstream words(text);
  std::string out;
  std::string line = first;
  bool fresh = true;
  for (std::string word; words >> word;) {
    if (!fresh && columns_of(line) + 1 + columns_of(word) > kWidth) {
      out += line + '\n';
      line = std::string(columns_of(first), ' ');
      fresh = true;
    }
    line += (fresh ? "" : " ") + word;
    fresh = false;
  }
  return out + line + '\n';
}

}  // namespace tapwright
