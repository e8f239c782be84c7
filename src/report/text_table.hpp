#pragma once
// Columns that line up.

#include <string>
#include <vector>

namespace tapwright {

/// Rows of cells, the first column left-aligned, the others right-aligned, two spaces apart, behind
/// two spaces. A row may be shorter than others. No trailing spaces.
[[nodiscard]] std::string table_text(const std::vector<std::vector<std::string>>& rows);

/// `text` in lines of at most 80 columns, behind `first` and then as many spaces.
[[nodiscard]] std::string item_text(const std::string& first, const std::string& text);

}  // namespace tapwright
