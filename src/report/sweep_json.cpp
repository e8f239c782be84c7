#include "report/sweep_json.hpp"

#include <algorithm>

#include "tapwright/base/text.hpp"
#include "tapwright/report/solution_report.hpp"
#include "tapwright/report/sweep_report.hpp"

namespace tapwright {
namespace {

using Json = nlohmann::ordered_json;

Json or_null(const std::optional<double>& value) { return value ? Json(*value) : Json(nullptr); }

std::string text_of(const Json& json, int indent = -1) {
  return json.dump(indent, ' ', false, Json::error_handler_t::replace);
}

Json value_json(const AxisValue& value) {
  return value.number ? Json(*value.number) : Json(value.label);
}

Json places_json(const Study& study, std::int64_t point) {
  Json out = Json::object();
  const std::vector<std::int64_t> places = study.places(point);
  for (std::size_t a = 0; a < places.size(); ++a) {
    out[study.axes[a].name()] = value_json(study.axes[a].at(places[a]));
  }
  return out;
}

Json axes_json(const Study& study) {
  constexpr std::int64_t kMostListed = 1000;
  Json axes = Json::array();
  for (const Axis& axis : study.axes) {
    Json one = {{"name", axis.name()}, {"unit", axis.unit()}, {"size", axis.size()}};
    if (axis.size() <= kMostListed) {
      Json values = Json::array();
      for (std::int64_t i = 0; i < axis.size(); ++i) values.push_back(value_json(axis.at(i)));
      one["values"] = std::move(values);
    }
    axes.push_back(std::move(one));
  }
  return axes;
}

Json yields_json(const Study& study, const SweepSummary& summary) {
  Json out = Json::array();
  for (const SweepSummary::ByValue& by : summary.by_axis) {
    const Axis& axis = study.axes[by.axis];
    Json values = Json::array();
    for (std::size_t i = 0; i < by.values.size(); ++i) {
      const SweepSummary::Yield& y = by.values[i];
      if (y.points == 0) continue;
      values.push_back({{"value", value_json(axis.at(static_cast<std::int64_t>(i)))},
                        {"points", y.points},
                        {"met", y.met},
                        {"met_by_shared", y.met_shared},
                        {"least_margin_mv", or_null(y.least_margin_mv)}});
    }
    if (!values.empty()) out.push_back({{"axis", axis.name()}, {"values", std::move(values)}});
  }
  return out;
}

Json table_json(const Study& study, const SweepSummary& summary) {
  Json out = Json::array();
  const Axis& axis = study.axes[study.switch_axis];
  for (const SwitchStretch& s : summary.switch_table()) {
    out.push_back({{"from", value_json(axis.at(s.from))},
                   {"to", value_json(axis.at(s.to))},
                   {"setting", s.shared ? Json(*s.shared) : Json(nullptr)},
                   {"least_margin_mv", or_null(s.least_margin_mv)}});
  }
  return out;
}

Json summary_json(const Study& study, const RecordHeader& header, const SweepSummary& summary) {
  Json shared = Json::array();
  for (std::size_t s = 0; s < header.plan.shared.size(); ++s) {
    const SweepSummary::OfShared& of = summary.of_shared[s];
    shared.push_back({{"setting", s},
                      {"origin", header.plan.shared[s].origin},
                      {"knobs", json_of(header.plan.shared[s].knobs)},
                      {"met", of.met},
                      {"overdrives", of.not_allowed},
                      {"least_margin_mv", or_null(of.least_margin_mv)},
                      {"least_at", of.least_margin_mv ? places_json(study, of.least_point)
                                                      : Json(nullptr)}});
  }
  Json inputs = Json::array();
  for (const InputFile& input : study.inputs) {
    inputs.push_back({{"file", input.path}, {"sha256", input.sha256}});
  }
  Json worst = Json::array();
  for (const SweepSummary::Worst& w : summary.worst) {
    worst.push_back(
        {{"point", w.point}, {"at", places_json(study, w.point)}, {"margin_mv", w.margin_mv}});
  }
  const auto one = summary.one_for_all();
  return {{"format", "tapwright.sweep/1"},
          {"version", TAPWRIGHT_VERSION},
          {"name", study.name},
          {"study_sha256", header.study_sha256},
          {"options", header.options},
          {"axes", axes_json(study)},
          {"switch_along", study.axes[study.switch_axis].name()},
          {"num_points", summary.num_points},
          {"part", {header.part.index + 1, header.part.count}},
          {"done", summary.done},
          {"without_answer", summary.failed},
          {"met", summary.met},
          {"least_margin_mv", or_null(summary.least_margin_mv)},
          {"tightest", worst},
          {"shared", shared},
          {"one_setting_for_all",
           {{"setting", one ? Json(*one) : Json(nullptr)},
            {"bound_on_least_margin_mv", or_null(header.plan.shared_bound_mv)},
            {"note", header.plan.note}}},
          {"switch_table",
           {{"stretches", table_json(study, summary)},
            {"met", summary.met_by_table()},
            {"fewest_possible", header.plan.fewest_settings ? Json(*header.plan.fewest_settings)
                                                            : Json(nullptr)}}},
          {"yield_by_axis", yields_json(study, summary)},
          {"inputs", inputs},
          {"caution", caution()}};
}

/// A field of RFC 4180.
std::string csv_field(const std::string& text) {
  if (text.find_first_of(",\"\r\n") == std::string::npos) return text;
  std::string out = "\"";
  for (const char c : text) out += c == '"' ? std::string("\"\"") : std::string(1, c);
  return out + '"';
}

/// The unit behind a knob's value, as column names have it.
std::string column_of(const std::string& knob) {
  if (knob == "swing") return "swing_mvppd";
  if (knob == "gain") return "gain_db";
  if (knob == "phase") return "phase_ui";
  return knob.starts_with("dfe:") ? knob + "_mv" : knob;
}

}  // namespace

std::optional<Diagnostic> write_json(const Study& study, const SweepRecords& records,
                                     const Sink& sink) {
  const RecordHeader& header = records.header();
  SweepSummary summary(study, header.plan);
  if (auto problem = records.for_each([&](const SweepRecord& r) { summary.add(r); })) {
    return problem;
  }
  std::string head = text_of(summary_json(study, header, summary), 2);
  head.erase(head.rfind('\n'));  // the closing brace comes after the points
  sink(head + ",\n  \"points\": [");
  bool first = true;
  auto problem = records.for_each([&](const SweepRecord& r) {
    Json one = json_of(r);
    one["at"] = places_json(study, r.point);
    sink((first ? "\n    " : ",\n    ") + text_of(one));
    first = false;
  });
  sink("\n  ]\n}\n");
  return problem;
}

std::optional<Diagnostic> write_csv(const Study& study, const SweepRecords& records,
                                    const Sink& sink) {
  const std::size_t num_shared = records.header().plan.shared.size();
  std::vector<std::string> knobs;
  return records.for_each([&, first = true](const SweepRecord& r) mutable {
    if (first) {
      first = false;
      std::string row = "point";
      for (const Axis& axis : study.axes) {
        row += "," + csv_field(axis.name() + (axis.unit().empty() ? "" : " (" + axis.unit() + ")"));
      }
      knobs = study.knobs;
      knobs.emplace_back("phase");
      for (const std::string& knob : knobs) {
        if (knob != "ctle") row += "," + column_of(knob);
        if (knob != "phase") row += "," + knob + "_code";
      }
      row += ",eye_mv,target_mv,margin_mv,width_ui,met,proof,gap_mv";
      for (std::size_t s = 0; s < num_shared; ++s) {
        const std::string name = "setting_" + std::to_string(s);
        row += "," + name + "_margin_mv," + name + "_met";
      }
      sink(row + ",problem\n");
    }
    std::string row = std::to_string(r.point);
    const std::vector<std::int64_t> places = study.places(r.point);
    for (std::size_t a = 0; a < places.size(); ++a) {
      row += "," + csv_field(study.axes[a].at(places[a]).label);
    }
    const bool answered = r.problem.empty();
    for (const std::string& name : knobs) {
      const auto found = std::find_if(r.knobs.begin(), r.knobs.end(),
                                      [&](const KnobValue& k) { return k.knob == name; });
      const bool has = found != r.knobs.end();
      if (name != "ctle") row += "," + (has ? exact(found->value) : "");
      if (name != "phase") row += "," + (has && found->code ? std::to_string(*found->code) : "");
    }
    if (answered) {
      row += "," + exact(r.eye_mv) + "," + exact(r.target_mv) + "," + exact(r.eye_mv - r.target_mv) +
             "," + (r.width_ui ? exact(*r.width_ui) : "") + "," + (r.met ? "yes" : "no") + "," +
             r.proof + "," + exact(r.gap_mv);
      for (const SweepRecord::Shared& s : r.shared) {
        row += "," + exact(s.eye_mv - r.target_mv) + "," + (s.met ? "yes" : "no");
      }
    } else {
      row += std::string(7 + 2 * num_shared, ',');
    }
    sink(row + "," + csv_field(r.problem) + "\n");
  });
}

}  // namespace tapwright
