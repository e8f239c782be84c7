#pragma once
// A table of codes read back from hardware, one row a lane.

#include <map>
#include <optional>
#include <string>
#include <string_view>
#include <vector>

#include "tapwright/link/link.hpp"

namespace tapwright {

/// What one lane's registers held. A knob that was not read back has no entry.
struct ReadBackLane {
  std::string lane;
  int line = 0;         ///< in the file, for messages
  std::string link;     ///< link file of this lane; empty = the one for all
  std::string channel;  ///< Touchstone file in place of the link's; empty = the link's
  /// By knob name ("swing", "fir:-1", "ctle", "gain", "dfe:1"): the code, or the value in the link
  /// file's unit (mVppd, mV) for a knob without codes.
  std::map<std::string, double> knobs;
  std::optional<double> phase_ui;
  std::optional<double> eye_height_v;  ///< measured
  std::optional<double> eye_width_ui;  ///< measured
};

/// Cells of a CSV or JSON table as text, before they mean anything.
struct TextTable {
  std::vector<std::string> columns;
  struct Row {
    int line = 0;
    std::vector<std::string> cells;  ///< as many as columns
  };
  std::vector<Row> rows;
};

/// CSV with a head line (comma, semicolon or tab; quoted cells; # comments), or JSON: a list of
/// objects with the columns as keys.
///
/// Errors: no head, no row, a row with another number of cells, a column twice, broken JSON, over
///         100000 rows or 1000 columns.
[[nodiscard]] Result<TextTable> parse_text_table(std::string_view text, const std::string& file_name);

/// The lanes of a table: columns `lane` (needed), `link`, `channel`, knob names or register fields of
/// the link, `phase_ui`, `eye_height_mv`, `eye_width_ui`; an empty cell is a missing value. Register
/// fields may be hexadecimal (0x..) and are decoded through the link's register map.
///
/// Errors: an unknown column, a lane twice, a cell that is no number, a code outside its list; each
///         with line and column.
[[nodiscard]] Result<std::vector<ReadBackLane>> parse_read_back(std::string_view text,
                                                                const std::string& file_name,
                                                                const Link& link);

/// The settings that a lane's codes stand for. Missing swing and CTLE stay open (no value), a missing
/// FIR tap is what the others leave (main) or open.
struct ReadBackSettings {
  std::optional<std::size_t> swing_index;
  std::optional<std::size_t> ctle_index;
  std::optional<Eigen::VectorXd> fir;
  std::optional<Eigen::VectorXd> dfe_v;
  std::optional<Eigen::Index> phase_samples;
};
/// Errors: a code outside its list, FIR taps that break the limits, FIR or DFE read back in part.
[[nodiscard]] Result<ReadBackSettings> settings_of(const ReadBackLane& lane, const Link& link,
                                                   const std::string& file_name);

}  // namespace tapwright
