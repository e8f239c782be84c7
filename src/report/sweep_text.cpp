#include <algorithm>

#include "report/text_table.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/report/solution_report.hpp"
#include "tapwright/report/sweep_report.hpp"

namespace tapwright {
namespace {

using Rows = std::vector<std::vector<std::string>>;

constexpr std::int64_t kMostPointsListed = 60;

/// Printable, without the quotes that messages put around it.
std::string plain(const std::string& text) {
  const std::string quoted = shown_text(text);
  return quoted.substr(1, quoted.size() - 2);
}

std::string mv(const std::optional<double>& value) { return value ? fixed(*value, 1) : "-"; }

std::string at(const Axis& axis, std::int64_t place) {
  const AxisValue value = axis.at(place);
  return value.number ? significant(*value.number, 6) : plain(value.label);
}

std::string at_with_unit(const Axis& axis, std::int64_t place) {
  return at(axis, place) + (axis.unit().empty() || !axis.at(place).number ? "" : " " + axis.unit());
}

std::string headed(const Axis& axis) {
  return plain(axis.name()) + (axis.unit().empty() ? "" : ", " + plain(axis.unit()));
}

std::string where(const Study& study, std::int64_t point) {
  const std::vector<std::int64_t> places = study.places(point);
  std::string text;
  for (std::size_t a = 0; a < places.size(); ++a) {
    text += (text.empty() ? "" : ", ") + plain(study.axes[a].name()) + " " +
            at_with_unit(study.axes[a], places[a]);
  }
  return text;
}

/// "A" ... "Z", "AA" ...: short names for shared settings.
std::string letter(std::size_t index) {
  std::string text(1, static_cast<char>('A' + index % 26));
  return index < 26 ? text : letter(index / 26 - 1) + text;
}

std::string knob_cell(const KnobValue& k) {
  if (k.knob == "ctle" && k.code) return std::to_string(*k.code);
  const std::string value = significant(k.value, 5);
  return k.code ? value + " (" + std::to_string(*k.code) + ")" : value;
}

std::string share(std::int64_t part, std::int64_t whole) {
  return whole == 0 ? "-" : fixed(100.0 * static_cast<double>(part) / static_cast<double>(whole), 1) + " %";
}

class Writer {
 public:
  Writer(const Study& study, const RecordHeader& header, const SweepSummary& summary)
      : study_(study), header_(header), summary_(summary), one_(summary.one_for_all()) {
    for (const SwitchStretch& s : summary.switch_table()) {
      if (s.shared) name(*s.shared);
    }
    if (one_) name(*one_);
  }

  std::string text(const std::vector<SweepRecord>& listed) {
    std::string text = heading() + "\n";
    text += table() + one_setting() + yields() + tightest();
    if (!listed.empty()) text += points(listed);
    text += "Taken as given\n";
    for (const InputFile& input : study_.inputs) {
      text += item_text("  ", plain(input.path) + "  sha256 " + input.sha256.substr(0, 16));
    }
    return text + "\n" + item_text("", caution());
  }

 private:
  void name(std::size_t shared) {
    if (std::find(named_.begin(), named_.end(), shared) == named_.end()) named_.push_back(shared);
  }
  std::string name_of(std::size_t shared) const {
    return letter(static_cast<std::size_t>(std::find(named_.begin(), named_.end(), shared) -
                                           named_.begin()));
  }

  std::string heading() const {
    std::string text = (study_.name.empty() ? "sweep" : plain(study_.name)) + "\n";
    for (const Axis& axis : study_.axes) {
      std::string one = plain(axis.name()) + ": ";
      const std::int64_t size = axis.size();
      if (size <= 8 && axis.has_names()) {
        for (std::int64_t i = 0; i < size; ++i) one += (i == 0 ? "" : ", ") + at(axis, i);
      } else {
        one += at_with_unit(axis, 0);
        if (size > 1) {
          one += " to " + at_with_unit(axis, size - 1) + ", " + std::to_string(size) + " values";
        }
      }
      text += item_text("  ", one);
    }
    const std::int64_t wanted = header_.part.size(summary_.num_points);
    std::string count = std::to_string(summary_.num_points) + " points";
    if (header_.part.count > 1) {
      count += "; this is part " + std::to_string(header_.part.index + 1) + " of " +
               std::to_string(header_.part.count) + " with " + std::to_string(wanted) + " of them";
    }
    if (summary_.done < wanted) {
      count += "; stopped after " + std::to_string(summary_.done) + " of " + std::to_string(wanted);
    }
    if (summary_.failed > 0) {
      count += "; " + std::to_string(summary_.failed) + " without an answer (see --csv)";
    }
    return text + item_text("  ", count);
  }

  std::string settings(const std::vector<std::size_t>& which) const {
    Rows rows{{"knob, value (code)"}};
    for (const std::size_t s : which) rows.front().push_back(name_of(s));
    for (const KnobValue& knob : header_.plan.shared[which.front()].knobs) {
      rows.push_back({knob.knob});
      for (const std::size_t s : which) {
        for (const KnobValue& k : header_.plan.shared[s].knobs) {
          if (k.knob == knob.knob) rows.back().push_back(knob_cell(k));
        }
      }
    }
    return table_text(rows);
  }

  std::string table() const {
    const std::vector<SwitchStretch> stretches = summary_.switch_table();
    if (stretches.empty()) return "";
    const Axis& axis = study_.axes[study_.switch_axis];
    const std::string along = plain(axis.name());
    std::string text = "Where to switch, along " + along + "\n";
    constexpr std::size_t kMostListed = 40;
    Rows rows{{"from " + headed(axis), "to", "setting", "least margin, mV"}};
    std::vector<std::size_t> used;
    bool gap = false;
    for (const SwitchStretch& s : stretches) {
      if (rows.size() > kMostListed) break;
      rows.push_back({at(axis, s.from), at(axis, s.to), s.shared ? name_of(*s.shared) : "none",
                      mv(s.least_margin_mv)});
      gap = gap || !s.shared;
      if (s.shared && std::find(used.begin(), used.end(), *s.shared) == used.end()) {
        used.push_back(*s.shared);
      }
    }
    text += table_text(rows);
    if (stretches.size() >= rows.size()) {
      text += "  ... " + std::to_string(summary_.num_stretches()) + " stretches in all\n";
    }
    if (gap) {
      text += item_text("  ", "none: no one setting that was tried meets the target at all points "
                              "there; the margin is that of each point's own best.");
    }
    if (!used.empty()) text += "\n" + settings(used);
    const auto num = static_cast<std::int64_t>(stretches.size());
    if (!gap && header_.plan.fewest_settings) {
      text += item_text("  ", *header_.plan.fewest_settings == num
                                  ? "Proven: no table with fewer stretches keeps every point at its "
                                    "target."
                                  : "Fewest among the settings that were tried; no table has fewer "
                                    "than " +
                                        std::to_string(*header_.plan.fewest_settings) + ".");
    } else if (!gap) {
      text += item_text("  ", "Fewest among the settings that were tried; not proven.");
    }
    return text + "\n";
  }

  std::string one_setting() const {
    std::string text = "One setting for all\n";
    if (!one_) return text + item_text("  ", "None: " + header_.plan.note + ".") + "\n";
    const SweepSummary::OfShared& of = summary_.of_shared[*one_];
    text += settings({*one_});
    text += item_text("  ", "Least margin " + mv(of.least_margin_mv) + " mV, at " +
                                where(study_, of.least_point) + "; the target is met at " +
                                std::to_string(of.met) + " of " + std::to_string(summary_.done) +
                                " points.");
    if (of.not_allowed > 0) {
      text += item_text("  ", "It would overdrive the receiver at " + std::to_string(of.not_allowed) +
                                  " points; no setting that was tried is allowed at more of them.");
    }
    const std::optional<double>& bound = header_.plan.shared_bound_mv;
    if (bound && of.least_margin_mv && of.not_allowed == 0) {
      const double left_mv = *bound - *of.least_margin_mv;
      text += item_text(
          "  ", left_mv < 1e-6
                    ? "Proven: no setting has a larger least margin over these points."
                    : "Bounded: no setting has a least margin above " + fixed(*bound, 1) +
                          " mV over these points; at most " + fixed(left_mv, 2) + " mV are left.");
    } else {
      text += item_text("  ", "The best of " + std::to_string(header_.plan.shared.size()) +
                                  " settings that were tried; not proven.");
    }
    return text + item_text("  ", header_.plan.note + ".") + "\n";
  }

  std::string yields() const {
    const auto row = [&](const std::string& what, std::int64_t met) {
      return std::vector<std::string>{what,
                                      std::to_string(met) + " of " + std::to_string(summary_.done),
                                      share(met, summary_.done)};
    };
    Rows rows{{"points that meet the target", "", "yield"},
              row("each with its own best setting", summary_.met)};
    if (!summary_.switch_table().empty()) {
      rows.push_back(row("with the switch table", summary_.met_by_table()));
    }
    if (one_) rows.push_back(row("with the one setting", summary_.of_shared[*one_].met));
    std::string text = "Yield\n" + table_text(rows) + "\n";
    for (const SweepSummary::ByValue& by : summary_.by_axis) {
      constexpr std::size_t kMostListed = 40;
      if (by.values.empty() || by.values.size() > kMostListed) continue;
      const Axis& axis = study_.axes[by.axis];
      Rows values{{headed(axis), "points", "own best", "one setting", "least margin, mV"}};
      for (std::size_t i = 0; i < by.values.size(); ++i) {
        const SweepSummary::Yield& y = by.values[i];
        if (y.points == 0) continue;
        values.push_back({at(axis, static_cast<std::int64_t>(i)), std::to_string(y.points),
                          share(y.met, y.points),
                          one_ && !y.met_shared.empty() ? share(y.met_shared[*one_], y.points) : "-",
                          mv(y.least_margin_mv)});
      }
      text += table_text(values) + "\n";
    }
    return text;
  }

  std::string tightest() const {
    if (summary_.worst.empty()) return "";
    Rows rows{{"margin, mV"}};
    for (const Axis& axis : study_.axes) rows.front().push_back(headed(axis));
    for (const SweepSummary::Worst& w : summary_.worst) {
      rows.push_back({fixed(w.margin_mv, 1)});
      const std::vector<std::int64_t> places = study_.places(w.point);
      for (std::size_t a = 0; a < places.size(); ++a) {
        rows.back().push_back(at(study_.axes[a], places[a]));
      }
    }
    return "Tightest points, each with its own best setting\n" + table_text(rows) + "\n";
  }

  std::string points(const std::vector<SweepRecord>& listed) const {
    Rows rows{{"point"}};
    for (const Axis& axis : study_.axes) rows.front().push_back(headed(axis));
    for (const std::string& knob : study_.knobs) rows.front().push_back(knob);
    rows.front().insert(rows.front().end(), {"eye, mV", "margin", "proof"});
    for (const SweepRecord& r : listed) {
      rows.push_back({std::to_string(r.point)});
      const std::vector<std::int64_t> places = study_.places(r.point);
      for (std::size_t a = 0; a < places.size(); ++a) {
        rows.back().push_back(at(study_.axes[a], places[a]));
      }
      for (const std::string& name : study_.knobs) {
        const auto found = std::find_if(r.knobs.begin(), r.knobs.end(),
                                        [&](const KnobValue& k) { return k.knob == name; });
        rows.back().push_back(found == r.knobs.end() ? "-" : knob_cell(*found));
      }
      if (r.problem.empty()) {
        rows.back().insert(rows.back().end(),
                           {fixed(r.eye_mv, 1), fixed(r.eye_mv - r.target_mv, 1), r.proof});
      } else {
        rows.back().push_back("no answer");
      }
    }
    return "Best codes of each point, value (code)\n" + table_text(rows) + "\n";
  }

  const Study& study_;
  const RecordHeader& header_;
  const SweepSummary& summary_;
  std::optional<std::size_t> one_;
  std::vector<std::size_t> named_;  // shared settings that are shown, in order
};

}  // namespace

Result<std::string> text_of(const Study& study, const SweepRecords& records) {
  SweepSummary summary(study, records.header().plan);
  std::vector<SweepRecord> listed;
  const bool few = records.header().part.size(study.num_points()) <= kMostPointsListed;
  auto problem = records.for_each([&](const SweepRecord& r) {
    summary.add(r);
    if (few) listed.push_back(r);
  });
  if (problem) return failure<std::string>(std::move(*problem));
  return {Writer(study, records.header(), summary).text(listed), {}};
}

}  // namespace tapwright
