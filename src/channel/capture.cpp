#include "tapwright/channel/capture.hpp"

#include <algorithm>
#include <array>
#include <bit>
#include <boost/math/interpolators/cardinal_quintic_b_spline.hpp>
#include <charconv>
#include <cmath>
#include <cstdint>
#include <cstring>
#include <map>
#include <utility>
#include <vector>

#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/channel/text_file.hpp"

namespace tapwright {
namespace {

constexpr std::size_t kMostErrors = 20;
constexpr int kMostColumns = 64;
constexpr double kLargestValue = 1e6;  ///< above this a scope marks a point as not measured

struct Dialect {
  char separator;  ///< ' ' = any run of blanks
  char decimal;
};

/// In order of trust: a comma separates only where nothing else does.
constexpr std::array<Dialect, 8> kDialects{{{';', '.'},
                                            {';', ','},
                                            {'\t', '.'},
                                            {'\t', ','},
                                            {' ', '.'},
                                            {' ', ','},
                                            {',', '.'},
                                            {',', ','}}};

/// A line without its end; `rest` moves past it.
std::string_view take_line(std::string_view& rest) {
  const auto* end = static_cast<const char*>(std::memchr(rest.data(), '\n', rest.size()));
  const std::size_t length =
      end == nullptr ? rest.size() : static_cast<std::size_t>(end - rest.data());
  std::string_view line = rest.substr(0, length);
  rest.remove_prefix(std::min(rest.size(), length + 1));
  while (!line.empty() && line.back() == '\r') line.remove_suffix(1);
  return line;
}

bool is_blank(char c) { return c == ' ' || c == '\t'; }

/// The next field of a row; `rest` moves past its separator. `last` tells that none follows.
struct Field {
  std::string_view text;
  bool last = false;
};

Field take_field(std::string_view& rest, char separator) {
  while (!rest.empty() && is_blank(rest.front()) && rest.front() != separator) {
    rest.remove_prefix(1);
  }
  if (separator == ' ') {
    while (!rest.empty() && is_blank(rest.front())) rest.remove_prefix(1);
  }
  Field field;
  if (!rest.empty() && rest.front() == '"') {
    const std::size_t close = rest.find('"', 1);
    if (close != std::string_view::npos) {
      field.text = rest.substr(1, close - 1);
      rest.remove_prefix(close + 1);
      const std::size_t next = separator == ' ' ? rest.find_first_of(" \t") : rest.find(separator);
      field.last = next == std::string_view::npos;
      rest.remove_prefix(field.last ? rest.size() : next + 1);
      return field;
    }
  }
  const std::size_t end = separator == ' ' ? rest.find_first_of(" \t") : rest.find(separator);
  field.last = end == std::string_view::npos;
  field.text = field.last ? rest : rest.substr(0, end);
  rest.remove_prefix(field.last ? rest.size() : end + 1);
  while (!field.text.empty() && is_blank(field.text.back())) field.text.remove_suffix(1);
  return field;
}

/// A finite number with the given decimal sign; no value for anything else.
bool to_number(std::string_view text, char decimal, double& value) {
  if (text.empty()) return false;
  std::array<char, 64> copy;
  if (decimal == ',') {
    if (text.size() > copy.size() || text.find('.') != std::string_view::npos) return false;
    std::copy(text.begin(), text.end(), copy.begin());
    const std::size_t comma = text.find(',');
    if (comma != std::string_view::npos) {
      if (comma + 1 >= text.size() || text[comma + 1] < '0' || text[comma + 1] > '9') return false;
      copy[comma] = '.';
    }
    text = {copy.data(), text.size()};
  }
  if (text.front() == '+') text.remove_prefix(1);
  const char* const end = text.data() + text.size();
  const auto [stop, code] = std::from_chars(text.data(), end, value);
  if (stop != end) return false;
  if (code == std::errc{}) return std::isfinite(value);
  const std::optional<double> tiny = parse_number(text);  // an underflow is a 0
  if (tiny) value = *tiny;
  return tiny.has_value();
}

/// Bit i: column i holds a number.
std::uint64_t numeric_columns(std::string_view line, const Dialect& dialect) {
  std::uint64_t mask = 0;
  double value = 0;
  for (int column = 0; column < kMostColumns; ++column) {
    const Field field = take_field(line, dialect.separator);
    if (to_number(field.text, dialect.decimal, value)) mask |= std::uint64_t{1} << column;
    if (field.last) break;
  }
  return mask;
}

struct Layout {
  Dialect dialect{',', '.'};
  std::uint64_t columns = 0;
};

/// The dialect and columns that most lines agree on: of a short text all lines, of a long one some
/// from its middle.
std::optional<Layout> find_layout(std::string_view text, int least_columns) {
  constexpr std::size_t kLooked = std::size_t{1} << 16;
  if (text.size() > 2 * kLooked) {
    text.remove_prefix(text.size() / 2);
    (void)take_line(text);
    text = text.substr(0, kLooked);
  }
  std::optional<Layout> best;
  int best_count = 0;
  for (const Dialect& dialect : kDialects) {
    std::map<std::uint64_t, int> counts;
    for (std::string_view rest = text; !rest.empty();) {
      const std::uint64_t mask = numeric_columns(take_line(rest), dialect);
      if (std::popcount(mask) < least_columns) continue;
      const int count = ++counts[mask];
      if (count > best_count) {
        best_count = count;
        best = Layout{dialect, mask};
      }
    }
  }
  return best;
}

/// The unit that a heading names, `Time (ns)`, `t/ps`, `CH1_mV`, in base SI.
std::optional<double> unit_in(std::string_view heading, bool time) {
  static constexpr std::array<std::pair<std::string_view, double>, 9> kTimes{{{"s", 1.0},
                                                                              {"ms", 1e-3},
                                                                              {"us", 1e-6},
                                                                              {"\xC2\xB5s", 1e-6},
                                                                              {"\xCE\xBCs", 1e-6},
                                                                              {"\xB5s", 1e-6},
                                                                              {"ns", 1e-9},
                                                                              {"ps", 1e-12},
                                                                              {"fs", 1e-15}}};
  static constexpr std::array<std::pair<std::string_view, double>, 7> kVolts{{{"V", 1.0},
                                                                              {"mV", 1e-3},
                                                                              {"uV", 1e-6},
                                                                              {"\xC2\xB5V", 1e-6},
                                                                              {"\xCE\xBCV", 1e-6},
                                                                              {"\xB5V", 1e-6},
                                                                              {"kV", 1e3}}};
  static constexpr std::array<std::pair<std::string_view, double>, 6> kWords{{{"second", 1.0},
                                                                              {"seconds", 1.0},
                                                                              {"sec", 1.0},
                                                                              {"volt", 1.0},
                                                                              {"volts", 1.0},
                                                                              {"millivolt", 1e-3}}};
  std::optional<double> found;
  const auto is_letter = [](char c) {
    return (c >= 'a' && c <= 'z') || (c >= 'A' && c <= 'Z') || static_cast<unsigned char>(c) > 127;
  };
  for (std::size_t i = 0; i < heading.size();) {
    if (!is_letter(heading[i])) {
      ++i;
      continue;
    }
    std::size_t end = i;
    while (end < heading.size() && is_letter(heading[end])) ++end;
    const std::string_view word = heading.substr(i, end - i);
    const auto look = [&](const auto& table, std::string_view w) {
      for (const auto& [name, size] : table) {
        if (name == w) found = size;
      }
    };
    if (time) {
      look(kTimes, word);
    } else {
      look(kVolts, word);
    }
    const std::string lower = lowercase(word);
    for (std::size_t k = 0; k < kWords.size(); ++k) {
      if (kWords[k].first == lower && (k < 3) == time) found = kWords[k].second;
    }
    i = end;
  }
  return found;
}

/// Reads rows: the chosen columns of one line.
class RowReader {
 public:
  RowReader(const Layout& layout, int time_column, int value_column, int minus_column)
      : layout_(layout),
        time_(time_column),
        value_(value_column),
        minus_(minus_column),
        last_(std::max({time_column, value_column, minus_column})) {}

  /// False when a wanted column holds no number; `bad` then says which, from 0, and `found` what.
  bool read(std::string_view line, double& time, double& value) {
    double minus = 0.0;
    for (int column = 0; column <= last_; ++column) {
      const Field field = take_field(line, layout_.dialect.separator);
      if (column == time_ || column == value_ || column == minus_) {
        double& target = column == time_ ? time : column == value_ ? value : minus;
        if (!to_number(field.text, layout_.dialect.decimal, target)) {
          bad = column, found = field.text, missing = field.text.empty();
          return false;
        }
      }
      if (field.last && column < last_) {
        bad = column + 1, found = {}, missing = true;
        return false;
      }
    }
    value -= minus;
    return true;
  }

  int bad = 0;
  std::string_view found;
  bool missing = false;

 private:
  Layout layout_;
  int time_, value_, minus_;
  int last_;
};

std::string seconds(double s) { return significant(s, 6) + " s"; }

Result<Capture> resampled_evenly(const std::vector<double>& times_s, Eigen::VectorXd values,
                                 const std::string& file, double least_step, double largest_step) {
  const std::size_t n = times_s.size();
  const double span_s = times_s.back() - times_s.front();
  const auto count = static_cast<Eigen::Index>(
      std::min({4 * n, std::max(n, std::size_t{1} << 22),
                static_cast<std::size_t>(std::min(span_s / least_step, 1e18)) + 1}));
  const double dt = span_s / static_cast<double>(count - 1);
  Capture out{Eigen::VectorXd(count), times_s.front(), dt};
  std::size_t k = 0;
  for (Eigen::Index i = 0; i < count; ++i) {
    const double t = times_s.front() + static_cast<double>(i) * dt;
    while (k + 2 < n && t > times_s[k + 1]) ++k;
    const double share = std::clamp((t - times_s[k]) / (times_s[k + 1] - times_s[k]), 0.0, 1.0);
    out.samples_v[i] = std::lerp(values[static_cast<Eigen::Index>(k)],
                                 values[static_cast<Eigen::Index>(k + 1)], share);
  }
  return {std::move(out),
          {warning_at(file, 0,
                      "times are uneven, steps from " + seconds(least_step) + " to " +
                          seconds(largest_step) + "; brought to an even grid of " + seconds(dt) +
                          " by straight lines")}};
}

}  // namespace

Result<Capture> parse_capture(std::string_view text, std::string_view file_name,
                              const CaptureFormat& format) {
  const std::string file(file_name);
  const auto fail = [&](int line, std::string message) {
    return failure<Capture>(error_at(file, line, std::move(message)));
  };
  if (text.starts_with("\xFF\xFE") || text.starts_with("\xFE\xFF")) {
    return fail(1, "found UTF-16 text; wanted ASCII or UTF-8");
  }
  if (text.starts_with("\xEF\xBB\xBF")) text.remove_prefix(3);
  const bool has_time = !format.dt_s;
  if (format.dt_s && !(std::isfinite(*format.dt_s) && *format.dt_s > 0)) {
    return fail(0, "found a time step of " + exact(*format.dt_s) + " s; wanted one above 0");
  }

  const std::optional<Layout> layout = find_layout(text, has_time ? 2 : 1);
  if (!layout) {
    return fail(0, has_time ? "found no rows of two numbers; wanted a time and a value in each, "
                              "between commas, semicolons, tabs or blanks"
                            : "found no rows with a number; wanted a value in each");
  }
  const Dialect dialect = layout->dialect;
  std::vector<int> columns;
  for (int column = 0; column < kMostColumns; ++column) {
    if (layout->columns >> column & 1) columns.push_back(column);
  }
  const int time_column = has_time ? columns[0] : -1;
  const int value_column =
      format.value_column ? *format.value_column - 1 : columns[has_time ? 1 : 0];
  const std::string hint = dialect.separator == ',' && columns.size() >= 4
                               ? "; a decimal comma needs another separator than a comma"
                               : "";
  const int minus_column = format.minus_column ? *format.minus_column - 1 : -1;
  for (const std::optional<int>& asked : {format.value_column, format.minus_column}) {
    if (asked && std::find(columns.begin(), columns.end(), *asked - 1) == columns.end()) {
      return fail(
          0, "column " + std::to_string(*asked) + " holds no numbers; wanted one of " + [&] {
            std::string list;
            for (const int c : columns) {
              list += (list.empty() ? "" : ", ") + std::to_string(c + 1);
            }
            return list;
          }());
    }
  }
  if (value_column == time_column || minus_column == time_column || minus_column == value_column) {
    if (has_time || minus_column == value_column) {
      return fail(0, "time and values stand in the same column; wanted one each");
    }
  }

  // Heading lines run up to the first row; their last mention of a unit counts.
  RowReader reader(*layout, time_column, value_column, minus_column);
  double time_unit_s = format.time_unit_s.value_or(1.0);
  double value_unit_v = format.value_unit_v.value_or(1.0);
  int line_number = 0;
  double time = 0.0, value = 0.0;
  std::string_view rest = text;
  std::string_view first_row = rest;
  int first_line = 1;
  while (!rest.empty()) {
    first_row = rest;
    first_line = line_number + 1;
    const std::string_view line = take_line(rest);
    ++line_number;
    if (reader.read(line, time, value)) break;
    const auto look = [&](std::string_view heading, bool at_time, bool at_value) {
      if (at_time && !format.time_unit_s) {
        if (const auto unit = unit_in(heading, true)) time_unit_s = *unit;
      }
      if (at_value && !format.value_unit_v) {
        if (const auto unit = unit_in(heading, false)) value_unit_v = *unit;
      }
    };
    if (dialect.separator == ' ') {  // words of a heading do not stand in columns then
      look(line, true, true);
      continue;
    }
    std::string_view fields = line;
    for (int column = 0; column < kMostColumns; ++column) {
      const Field field = take_field(fields, dialect.separator);
      look(field.text, column == time_column, column == value_column);
      if (field.last) break;
    }
  }

  // All rows. Times are only watched: an even grid needs no more than its first and last.
  const auto most_rows = static_cast<Eigen::Index>(
      std::count(first_row.begin(), first_row.end(), '\n') + (text.ends_with('\n') ? 0 : 1));
  Result<Capture> result;
  Capture out;
  out.samples_v.resize(most_rows);
  Eigen::Index n = 0;
  double first_s = 0.0, last_s = 0.0, largest_step = 0.0;
  double least_step = std::numeric_limits<double>::infinity();
  bool has_equal_times = false;
  std::vector<std::pair<Eigen::Index, double>> milestones;
  rest = first_row;
  line_number = first_line - 1;
  while (!rest.empty() && result.notes.size() < kMostErrors) {
    const std::string_view line = take_line(rest);
    ++line_number;
    if (!reader.read(line, time, value)) {
      if (trimmed(line).empty()) continue;
      result.notes.push_back(error_at(
          file, line_number,
          (reader.missing ? "found nothing in column " + std::to_string(reader.bad + 1)
                          : "found " + shown_text(reader.found) + " in column " +
                                std::to_string(reader.bad + 1)) +
              "; wanted a number" + (dialect.decimal == ',' ? " with a decimal comma" : "")));
      continue;
    }
    value *= value_unit_v;
    if (std::abs(value) > kLargestValue) {
      result.notes.push_back(error_at(
          file, line_number, "found a value of " + exact(value) + " V; wanted less than 1e6 V"));
      continue;
    }
    out.samples_v[n] = value;
    if (has_time) {
      const double t = time * time_unit_s;
      if (n == 0) {
        first_s = t;
      } else {
        const double step = t - last_s;
        if (step < 0) {
          result.notes.push_back(error_at(file, line_number,
                                          "time " + exact(t) + " s does not rise above " +
                                              exact(last_s) + " s before it" + hint));
          continue;
        }
        has_equal_times = has_equal_times || step == 0;
        largest_step = std::max(largest_step, step);
        least_step = std::min(least_step, step);
      }
      last_s = t;
      if (n < 1024 || n % 1024 == 0) milestones.emplace_back(n, t);
    }
    ++n;
  }
  if (!result.notes.empty()) return result;
  if (n < 2) return fail(0, "found " + std::to_string(n) + " row(s) of numbers; wanted 2 or more");
  out.samples_v.conservativeResize(n);
  if (!has_time) {
    out.dt_s = *format.dt_s;
    result.value = std::move(out);
    return result;
  }
  if (!(last_s > first_s)) {
    return fail(line_number,
                "all times are " + exact(first_s) + " s; wanted times that rise" + hint);
  }
  const double dt = (last_s - first_s) / static_cast<double>(n - 1);
  // Few printed digits make equal times and jumps of one unit in the last place; such a clock is
  // even if it keeps to its mean within a jump.
  const double allowed = has_equal_times ? largest_step : 0.5 * dt;
  bool even = has_equal_times || largest_step < 1.5 * dt;
  for (const auto& [i, t] : milestones) {
    even = even && std::abs(t - first_s - static_cast<double>(i) * dt) <= allowed;
  }
  if (!even) {
    if (has_equal_times) {
      return fail(0, "times repeat and are uneven, steps from 0 to " + seconds(largest_step) +
                         "; wanted times that rise");
    }
    std::vector<double> times_s;
    times_s.reserve(static_cast<std::size_t>(n));
    for (rest = first_row; !rest.empty();) {
      if (reader.read(take_line(rest), time, value)) times_s.push_back(time * time_unit_s);
    }
    return resampled_evenly(times_s, std::move(out.samples_v), file, least_step, largest_step);
  }
  out.start_s = first_s;
  out.dt_s = dt;
  result.value = std::move(out);
  return result;
}

Result<Capture> read_capture(const std::string& file_name, const CaptureFormat& format) {
  const Result<TextFile> file = read_text_file(file_name);
  if (!file) return {std::nullopt, file.notes};
  return parse_capture(file.value->text, file_name, format);
}

namespace {

/// A record on the grid: resampled so that a UI holds samples_per_ui samples.
Result<Eigen::VectorXd> on_grid(const Capture& capture, const TimeGrid& grid,
                                const std::string& place) {
  if (!(std::isfinite(grid.ui_s) && grid.ui_s > 0) || grid.samples_per_ui < 1) {
    return failure<Eigen::VectorXd>(error_at(place, 0,
                                             "found a unit interval of " + exact(grid.ui_s) +
                                                 " s and " + std::to_string(grid.samples_per_ui) +
                                                 " samples per UI; wanted both above 0"));
  }
  Result<Eigen::VectorXd> result;
  const double per_ui = grid.ui_s / capture.dt_s;
  const double length_ui = static_cast<double>(capture.samples_v.size() - 1) / per_ui;
  if (per_ui < 2 || length_ui < 1) {
    return failure<Eigen::VectorXd>(error_at(
        place, 0,
        "found " + std::to_string(capture.samples_v.size()) + " samples " +
            significant(capture.dt_s, 4) + " s apart, " + significant(per_ui, 4) +
            " in a unit interval of " + significant(grid.ui_s, 4) +
            " s; wanted a record of at least one UI with 2 samples or more in each; is the unit of "
            "time right?"));
  }
  if (per_ui < 4) {
    result.notes.push_back(
        warning_at(place, 0,
                   "found " + significant(per_ui, 3) +
                       " samples per UI; fewer than 4 hardly show the signal between "
                       "them"));
  }
  const auto size =
      static_cast<Eigen::Index>(std::floor(length_ui * grid.samples_per_ui + 1e-9)) + 1;
  if (std::abs(per_ui / grid.samples_per_ui - 1) * static_cast<double>(size) < 1e-6) {
    result.value = capture.samples_v.head(std::min(size, capture.samples_v.size()));
    return result;
  }
  // Level ends let the spline stand on something outside.
  constexpr Eigen::Index kMargin = 8;
  const Eigen::Index n = capture.samples_v.size();
  Eigen::VectorXd padded(n + 2 * kMargin);
  padded << Eigen::VectorXd::Constant(kMargin, capture.samples_v[0]), capture.samples_v,
      Eigen::VectorXd::Constant(kMargin, capture.samples_v[n - 1]);
  const boost::math::interpolators::cardinal_quintic_b_spline<double> spline(
      padded.data(), static_cast<std::size_t>(padded.size()), 0.0, 1.0);
  Eigen::VectorXd samples_v(size);
  for (Eigen::Index i = 0; i < size; ++i) {
    samples_v[i] = spline(kMargin + static_cast<double>(i) * per_ui / grid.samples_per_ui);
  }
  result.value = std::move(samples_v);
  return result;
}

Result<PulseResponse> finished(Eigen::VectorXd samples_v, const TimeGrid& grid,
                               std::vector<Diagnostic> notes, const std::string& place) {
  Eigen::Index peak = 0;
  samples_v.cwiseAbs().maxCoeff(&peak);
  if (samples_v[peak] == 0) {
    return failure<PulseResponse>(error_at(place, 0, "found a flat record; wanted a pulse"));
  }
  if (samples_v[peak] < 0) {
    notes.push_back(warning_at(place, 0,
                               "the largest excursion of the pulse is negative, " +
                                   significant(v_to_mv(samples_v[peak]), 4) +
                                   " mV at 1 V launch; is the polarity right?"));
  }
  return {PulseResponse(std::move(samples_v), grid.samples_per_ui, grid.ui_s), std::move(notes)};
}

}  // namespace

Result<PulseResponse> pulse_from_pulse(const Capture& pulse, const TimeGrid& grid, double launch_v,
                                       std::string_view label) {
  const std::string place(label);
  if (!(std::isfinite(launch_v) && launch_v > 0)) {
    return failure<PulseResponse>(
        error_at(place, 0, "found a launch of " + exact(launch_v) + " V; wanted one above 0"));
  }
  Result<Eigen::VectorXd> samples = on_grid(pulse, grid, place);
  if (!samples) return {std::nullopt, samples.notes};
  const double peak_v = samples.value->cwiseAbs().maxCoeff();
  const double opens_v = (*samples.value)[0];
  if (std::abs(opens_v) > 0.01 * peak_v) {
    samples.notes.push_back(warning_at(
        place, 0,
        "the record opens at " + significant(v_to_mv(opens_v), 3) + " mV, " +
            significant(100 * std::abs(opens_v) / peak_v, 2) +
            " % of the peak; what came before, or an offset, counts as part of the pulse"));
  }
  return finished(*samples.value / launch_v, grid, std::move(samples.notes), place);
}

Result<PulseResponse> pulse_from_step(const Capture& step, const TimeGrid& grid, double step_v,
                                      std::string_view label) {
  const std::string place(label);
  if (!(std::isfinite(step_v) && step_v > 0)) {
    return failure<PulseResponse>(
        error_at(place, 0, "found a step of " + exact(step_v) + " V; wanted one above 0"));
  }
  Result<Eigen::VectorXd> samples = on_grid(step, grid, place);
  if (!samples) return {std::nullopt, samples.notes};
  const Eigen::VectorXd& s = *samples.value;
  // Before the record the step stood where it begins: the mean of what comes before its first move.
  const double reach_v = (s.array() - s[0]).abs().maxCoeff();
  Eigen::Index quiet = 1;
  while (quiet < s.size() && std::abs(s[quiet] - s[0]) < 0.02 * reach_v) ++quiet;
  const double before_v = s.head(std::max<Eigen::Index>(1, quiet - grid.samples_per_ui)).mean();
  Eigen::VectorXd pulse(s.size());
  for (Eigen::Index i = 0; i < s.size(); ++i) {
    const Eigen::Index earlier = i - grid.samples_per_ui;
    pulse[i] = (s[i] - (earlier >= 0 ? s[earlier] : before_v)) / step_v;
  }
  return finished(std::move(pulse), grid, std::move(samples.notes), place);
}

}  // namespace tapwright
