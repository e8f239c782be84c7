#include "tapwright/link/read_back.hpp"

#include <algorithm>
#include <charconv>
#include <cmath>
#include <nlohmann/json.hpp>
#include <set>

#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/equalizer/knobs.hpp"

namespace tapwright {
namespace {

constexpr std::size_t kMostRows = 100000;
constexpr std::size_t kMostColumns = 1000;
constexpr std::size_t kMostNotes = 20;

/// One line of CSV into cells; quotes double inside quoted cells.
std::vector<std::string> split_line(std::string_view line, char separator) {
  std::vector<std::string> cells{""};
  bool quoted = false;
  for (std::size_t i = 0; i < line.size(); ++i) {
    const char c = line[i];
    if (quoted) {
      if (c == '"' && i + 1 < line.size() && line[i + 1] == '"') {
        cells.back() += '"';
        ++i;
      } else if (c == '"') {
        quoted = false;
      } else {
        cells.back() += c;
      }
    } else if (c == '"' && trimmed(cells.back()).empty()) {
      cells.back().clear();
      quoted = true;
    } else if (c == separator) {
      cells.emplace_back();
    } else {
      cells.back() += c;
    }
  }
  for (std::string& cell : cells) cell = std::string(trimmed(cell));
  return cells;
}

Result<TextTable> table_from_json(std::string_view text, const std::string& file_name) {
  const auto document = nlohmann::ordered_json::parse(text, nullptr, false, true);
  if (!document.is_array()) {
    return failure<TextTable>(error_at(file_name, 0, "wanted a JSON list of objects, one a row"));
  }
  TextTable table;
  std::vector<Diagnostic> notes;
  if (document.size() > kMostRows) {
    return failure<TextTable>(error_at(file_name, 0, "found " + std::to_string(document.size()) +
                                                         " rows; at most 100000 are read"));
  }
  for (const auto& object : document) {
    if (!object.is_object()) {
      return failure<TextTable>(error_at(file_name, 0, "wanted every row to be a JSON object"));
    }
    for (const auto& [key, value] : object.items()) {
      if (std::find(table.columns.begin(), table.columns.end(), key) == table.columns.end()) {
        table.columns.push_back(key);
      }
    }
  }
  if (table.columns.size() > kMostColumns) {
    return failure<TextTable>(error_at(file_name, 0, "found over 1000 different keys"));
  }
  int row_number = 0;
  for (const auto& object : document) {
    TextTable::Row row{++row_number, std::vector<std::string>(table.columns.size())};
    for (const auto& [key, value] : object.items()) {
      const auto column = std::find(table.columns.begin(), table.columns.end(), key) - table.columns.begin();
      std::string cell;
      if (value.is_string()) cell = value.get<std::string>();
      else if (value.is_number()) cell = value.dump();
      else if (!value.is_null()) {
        notes.push_back(error_at(file_name, 0, "row " + std::to_string(row_number) + ", key " + shown_text(key) +
                                                   ": wanted a number or a text"));
        if (notes.size() >= kMostNotes) return {std::nullopt, notes};
      }
      row.cells[static_cast<std::size_t>(column)] = cell;
    }
    table.rows.push_back(std::move(row));
  }
  if (table.rows.empty()) notes.push_back(error_at(file_name, 0, "holds no row"));
  if (!notes.empty()) return {std::nullopt, std::move(notes)};
  return {std::move(table), {}};
}

}  // namespace

Result<TextTable> parse_text_table(std::string_view text, const std::string& file_name) {
  if (text.starts_with("\xEF\xBB\xBF")) text.remove_prefix(3);
  const std::string_view start = trimmed(text);
  if (start.starts_with('[') || start.starts_with('{')) return table_from_json(start, file_name);
  TextTable table;
  std::vector<Diagnostic> notes;
  char separator = ',';
  int line_number = 0;
  while (!text.empty()) {
    const std::size_t end = std::min(text.find('\n'), text.size());
    const std::string_view line = trimmed(text.substr(0, end));
    text.remove_prefix(std::min(end + 1, text.size()));
    ++line_number;
    if (line.empty() || line.front() == '#') continue;
    if (table.columns.empty()) {
      for (const char c : {';', '\t'}) {
        if (std::count(line.begin(), line.end(), c) > std::count(line.begin(), line.end(), separator)) separator = c;
      }
      table.columns = split_line(line, separator);
      if (table.columns.size() > kMostColumns) {
        return failure<TextTable>(error_at(file_name, line_number, "found over 1000 columns"));
      }
      std::set<std::string> seen;
      for (const std::string& column : table.columns) {
        if (!seen.insert(column).second) {
          return failure<TextTable>(error_at(file_name, line_number, "column " + shown_text(column) + " stands twice"));
        }
      }
      continue;
    }
    TextTable::Row row{line_number, split_line(line, separator)};
    if (row.cells.size() != table.columns.size()) {
      notes.push_back(error_at(file_name, line_number, "found " + std::to_string(row.cells.size()) + " cells; the head has " +
                                                           std::to_string(table.columns.size()) + " columns"));
      if (notes.size() >= kMostNotes) break;
      continue;
    }
    if (table.rows.size() >= kMostRows) {
      notes.push_back(error_at(file_name, line_number, "over 100000 rows"));
      break;
    }
    table.rows.push_back(std::move(row));
  }
  if (table.columns.empty()) notes.push_back(error_at(file_name, 0, "holds no head line with the names of the columns"));
  else if (table.rows.empty() && notes.empty()) notes.push_back(error_at(file_name, 0, "holds no row"));
  if (!notes.empty()) return {std::nullopt, std::move(notes)};
  return {std::move(table), {}};
}

namespace {

/// "0x1F" or a decimal number.
std::optional<double> number_or_hex(const std::string& cell) {
  if (cell.size() > 2 && cell[0] == '0' && (cell[1] == 'x' || cell[1] == 'X')) {
    unsigned long long value = 0;
    const char* end = cell.data() + cell.size();
    const auto [stop, code] = std::from_chars(cell.data() + 2, end, value, 16);
    if (code != std::errc{} || stop != end) return std::nullopt;
    return static_cast<double>(value);
  }
  return parse_number(cell);
}

/// The code that a register field's value stands for.
std::optional<double> decoded(const RegisterField& field, double value) {
  const int width = field.high_bit - field.low_bit + 1;
  const double span = std::ldexp(1.0, width);
  if (value != std::floor(value) || value < 0.0 || value >= span) return std::nullopt;
  if (!field.table.empty()) {
    for (const auto& [code, held] : field.table) {
      if (static_cast<double>(held) == value) return static_cast<double>(code);
    }
    return std::nullopt;
  }
  return value;
}

std::string list_of(const std::vector<Code>& codes) {
  if (codes.size() > 12) {
    return std::to_string(codes.front().code) + " ... " + std::to_string(codes.back().code);
  }
  std::string text;
  for (const Code& c : codes) text += (text.empty() ? "" : ", ") + std::to_string(c.code);
  return text;
}

const Code* code_named(const std::vector<Code>& codes, double code) {
  const auto found = std::find_if(codes.begin(), codes.end(),
                                  [&](const Code& c) { return static_cast<double>(c.code) == code; });
  return found == codes.end() ? nullptr : &*found;
}

/// A code as read, or its two's complement in the field's width when only that is on the list.
double signed_code(const RegisterField& field, double value, const Device& device) {
  const double span = std::ldexp(1.0, field.high_bit - field.low_bit + 1);
  if (!field.table.empty() || value < span / 2) return value;
  const auto has = [&](const std::vector<Code>& codes) {
    return code_named(codes, value) == nullptr && code_named(codes, value - span) != nullptr;
  };
  for (const FirTap& tap : device.transmitter.fir.taps) {
    if (field.knob == "fir:" + std::to_string(tap.position) && has(tap.codes)) return value - span;
  }
  for (const DfeTap& tap : device.receiver.dfe) {
    if (field.knob == "dfe:" + std::to_string(tap.position) && has(tap.codes)) return value - span;
  }
  return value;
}

}  // namespace

Result<std::vector<ReadBackLane>> parse_read_back(std::string_view text, const std::string& file_name,
                                                  const Link& link) {
  const auto table = parse_text_table(text, file_name);
  if (!table) return {std::nullopt, table.notes};
  std::vector<std::string> known = {"lane", "link", "channel", "phase_ui", "eye_height_mv", "eye_width_ui"};
  for (const Knob& knob : knobs_of(link.device)) known.push_back(knob.name);
  for (const RegisterField& field : link.registers) known.push_back(field.field);
  std::vector<Diagnostic> notes;
  const auto problem = [&](int line, const std::string& message) {
    if (notes.size() < kMostNotes) notes.push_back(error_at(file_name, line, message));
  };
  const auto& columns = table.value->columns;
  for (const std::string& column : columns) {
    if (std::find(known.begin(), known.end(), column) != known.end()) continue;
    const auto near = nearest_word(column, known);
    problem(1, "column " + shown_text(column) + " is not known" + (near ? "; did you mean " + shown_text(*near) + "?" : ""));
  }
  if (std::find(columns.begin(), columns.end(), "lane") == columns.end()) {
    problem(1, "column \"lane\" is missing");
  }
  if (!notes.empty()) return {std::nullopt, std::move(notes)};

  std::vector<ReadBackLane> lanes;
  std::set<std::string> names;
  for (const TextTable::Row& row : table.value->rows) {
    ReadBackLane lane;
    lane.line = row.line;
    for (std::size_t i = 0; i < columns.size(); ++i) {
      const std::string& column = columns[i];
      const std::string& cell = row.cells[i];
      if (column == "lane") lane.lane = cell;
      if (column == "link") lane.link = cell;
      if (column == "channel") lane.channel = cell;
      if (cell.empty() || column == "lane" || column == "link" || column == "channel") continue;
      const auto value = number_or_hex(cell);
      if (!value) {
        problem(row.line, "column " + column + ": found " + shown_text(cell) + ", wanted a number");
        continue;
      }
      if (column == "phase_ui") {
        if (std::abs(*value) > 2.0) problem(row.line, "column phase_ui: found " + cell + ", wanted -2 to 2");
        lane.phase_ui = value;
      } else if (column == "eye_height_mv") {
        lane.eye_height_v = mv_to_v(*value);
      } else if (column == "eye_width_ui") {
        if (*value < 0.0 || *value > 1.0) problem(row.line, "column eye_width_ui: found " + cell + ", wanted 0 to 1");
        lane.eye_width_ui = value;
      } else {
        const auto field = std::find_if(link.registers.begin(), link.registers.end(),
                                        [&](const RegisterField& f) { return f.field == column; });
        std::string knob = column;
        std::optional<double> code = value;
        if (field != link.registers.end()) {
          knob = field->knob;
          code = decoded(*field, *value);
          if (!code) {
            problem(row.line, "column " + column + ": " + cell + " is no value of this register field");
            continue;
          }
          code = signed_code(*field, *code, link.device);
        }
        if (!lane.knobs.emplace(knob, *code).second) {
          problem(row.line, "column " + column + ": knob " + knob + " stands in another column too");
        }
      }
    }
    if (lane.lane.empty()) problem(row.line, "column lane: is empty");
    else if (!names.insert(lane.lane).second) problem(row.line, "lane " + shown_text(lane.lane) + " stands twice");
    if (!lane.link.empty() && !lane.channel.empty()) {
      problem(row.line, "columns link and channel: only one of them can name the lane's channel");
    }
    const auto settings = settings_of(lane, link, file_name);
    if (lane.link.empty()) {
      for (const Diagnostic& note : settings.notes) problem(note.line, note.message);
    }
    lanes.push_back(std::move(lane));
  }
  if (!notes.empty()) return {std::nullopt, std::move(notes)};
  return {std::move(lanes), {}};
}

Result<ReadBackSettings> settings_of(const ReadBackLane& lane, const Link& link, const std::string& file_name) {
  ReadBackSettings out;
  std::vector<Diagnostic> notes;
  const auto problem = [&](const std::string& message) { notes.push_back(error_at(file_name, lane.line, message)); };
  const auto read = [&](const std::string& name) -> std::optional<double> {
    const auto found = lane.knobs.find(name);
    return found == lane.knobs.end() ? std::nullopt : std::optional(found->second);
  };
  const auto outside = [&](const std::string& knob, double code, const std::string& allowed) {
    problem("column " + knob + ": code " + exact(code) + " is not one of " + allowed);
  };

  const Transmitter& transmitter = link.device.transmitter;
  if (const auto code = read("swing")) {
    const Code* swing = code_named(transmitter.swings, *code);
    if (swing == nullptr) outside("swing", *code, list_of(transmitter.swings));
    else out.swing_index = static_cast<std::size_t>(swing - transmitter.swings.data());
  } else if (transmitter.swings.size() == 1) {
    out.swing_index = 0;
  }

  const auto ctle = read("ctle");
  const auto gain = read("gain");
  const auto& states = link.device.receiver.ctle;
  if (ctle || states.size() == 1) {
    std::string allowed;
    for (std::size_t i = 0; i < states.size() && !out.ctle_index; ++i) {
      const bool fits = (!ctle || states[i].code == *ctle) &&
                        (!gain || (states[i].gain && states[i].gain->code == *gain));
      if (fits) out.ctle_index = i;
      if (i < 24) allowed += (allowed.empty() ? "" : ", ") + std::to_string(states[i].code);
    }
    if (!out.ctle_index) outside(gain ? "ctle (with the gain code)" : "ctle", *ctle, allowed);
  }

  const FirLimits& fir = transmitter.fir;
  Eigen::VectorXd taps = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(fir.taps.size()));
  const auto main = static_cast<Eigen::Index>(fir.main_index());
  std::size_t num_read = 0;
  bool main_read = false;
  bool good = true;
  for (std::size_t i = 0; i < fir.taps.size(); ++i) {
    const FirTap& tap = fir.taps[i];
    const std::string name = "fir:" + std::to_string(tap.position);
    const auto value = read(name);
    if (!value) continue;
    const auto at = static_cast<Eigen::Index>(i);
    if (at == main) main_read = true;
    else ++num_read;
    if (tap.codes.empty()) {
      taps[at] = *value;
    } else if (const Code* code = code_named(tap.codes, *value)) {
      taps[at] = code->value;
    } else {
      outside(name, *value, list_of(tap.codes));
      good = false;
    }
  }
  if (num_read > 0 && num_read + 1 < fir.taps.size()) {
    problem("the FIR is read back in part: " + std::to_string(num_read) + " of " + std::to_string(fir.taps.size() - 1) +
            " taps beside the main one");
  } else if (good && (num_read + 1 == fir.taps.size() || main_read)) {
    if (!main_read && !fir.taps[fir.main_index()].is_remainder) {
      taps[main] = 0.0;
      taps[main] = fir.peak_limit - taps.lpNorm<1>();
    }
    taps = with_remainder(fir, taps);
    if (keeps_limits(fir, taps)) {
      out.fir = taps;
    } else {
      std::string shown;
      for (const double c : taps) shown += (shown.empty() ? "" : ", ") + significant(c, 6);
      problem("the FIR taps (" + shown + ") break the transmitter's limits");
    }
  }

  const DfeLimits& dfe = link.device.receiver.dfe;
  std::size_t num_dfe = 0;
  Eigen::VectorXd dfe_v = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(dfe.size()));
  for (std::size_t i = 0; i < dfe.size(); ++i) {
    const std::string name = "dfe:" + std::to_string(dfe[i].position);
    const auto value = read(name);
    if (!value) continue;
    ++num_dfe;
    if (dfe[i].codes.empty()) {
      dfe_v[static_cast<Eigen::Index>(i)] = mv_to_v(*value);
      if (!dfe[i].relative && std::abs(mv_to_v(*value)) > dfe[i].max * (1.0 + 1e-9)) {
        problem("column " + name + ": " + exact(*value) + " mV lies outside +-" + significant(v_to_mv(dfe[i].max), 6) + " mV");
      }
    } else if (const Code* code = code_named(dfe[i].codes, *value)) {
      dfe_v[static_cast<Eigen::Index>(i)] = code->value;
    } else {
      outside(name, *value, list_of(dfe[i].codes));
    }
  }
  if (num_dfe > 0 && num_dfe < dfe.size()) {
    problem("the DFE is read back in part: " + std::to_string(num_dfe) + " of " + std::to_string(dfe.size()) + " taps");
  } else if (num_dfe == dfe.size() && num_dfe > 0) {
    // A relative tap's code is a share of the main cursor, which only the eye knows.
    const bool relative = std::any_of(dfe.begin(), dfe.end(), [](const DfeTap& t) { return t.relative; });
    if (!relative) out.dfe_v = dfe_v;
  } else if (dfe.empty()) {
    out.dfe_v = dfe_v;
  }
  if (lane.phase_ui) out.phase_samples = std::lround(*lane.phase_ui * link.samples_per_ui);
  if (!notes.empty()) return {std::nullopt, std::move(notes)};
  return {std::move(out), {}};
}

}  // namespace tapwright
