#include "tapwright/report/audit_report.hpp"

#include <algorithm>
#include <cmath>

#include "report/escape.hpp"
#include "report/page.hpp"
#include "report/settings_json.hpp"
#include "report/text_table.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/link/register_writes.hpp"
#include "tapwright/report/solution_report.hpp"

namespace tapwright {
namespace {

using Json = nlohmann::ordered_json;
using Rows = std::vector<std::vector<std::string>>;

std::string mv(double v) { return fixed(v_to_mv(v), 1); }
std::string lane_name(const std::string& lane) { return printable_text(lane, 40); }

struct Part {
  const char* name;
  const char* key;
  double AuditedLane::Parts::*value;
};
constexpr Part kParts[] = {{"swing, CTLE", "state", &AuditedLane::Parts::state_v},
                           {"objective", "objective", &AuditedLane::Parts::objective_v},
                           {"phase", "phase", &AuditedLane::Parts::phase_v},
                           {"clipping", "clipping", &AuditedLane::Parts::clipping_v},
                           {"rounding", "quantisation", &AuditedLane::Parts::quantisation_v},
                           {"unexplained", "unexplained", &AuditedLane::Parts::unexplained_v}};

Rows lanes_table(const Audit& audit) {
  Rows rows{{"lane", "read back, mV", "best, mV", "gap, mV", "gap, dB", "proof", "measured, mV", "verdict"}};
  for (const AuditedLane& lane : audit.lanes) {
    rows.push_back({lane_name(lane.lane), mv(lane.height_v), mv(lane.best_v), mv(lane.gap_v),
                    lane.gap_db ? fixed(*lane.gap_db, 2) : "-", name_of(lane.best.proof.kind),
                    lane.measured_height_v ? mv(*lane.measured_height_v) : "-", lane.passed ? "pass" : "FAIL"});
  }
  return rows;
}

Rows parts_table(const Audit& audit) {
  Rows rows{{"lane", "gap"}};
  for (const Part& part : kParts) rows[0].push_back(part.name);
  for (const AuditedLane& lane : audit.lanes) {
    rows.push_back({lane_name(lane.lane), mv(lane.best_v - lane.height_v)});
    for (const Part& part : kParts) rows.back().push_back(mv(lane.parts.*part.value));
  }
  return rows;
}

Rows costs_table(const Audit& audit) {
  Rows rows{{"lane", "knob", "read back", "best", "codes off", "restored, mV", "restored, rest follows, mV"}};
  for (const AuditedLane& lane : audit.lanes) {
    for (const KnobCost& cost : lane.costs) {
      rows.push_back({lane_name(lane.lane), cost.knob.name, cost.at, cost.best,
                      cost.codes_off ? std::to_string(*cost.codes_off) : "-", mv(cost.gain_v), mv(cost.gain_readapted_v)});
    }
  }
  return rows;
}

std::string with_error(const FittedValue& v, double scale, int decimals, const std::string& unit) {
  std::string text = fixed(v.value * scale, decimals) + unit;
  text += v.standard_error ? " +- " + fixed(1.96 * *v.standard_error * scale, decimals) + unit : " (not determined)";
  return text;
}

std::vector<std::string> fit_lines(const AuditReport& report) {
  std::vector<std::string> lines;
  for (const LaneFit& f : report.fits) {
    const std::string who = f.lane.empty() ? "scan" : "lane " + lane_name(f.lane);
    if (!f.fit) {
      lines.push_back(who + ": not fitted, " + f.why_not);
      continue;
    }
    const ScanFit& fit = *f.fit;
    lines.push_back(who + ": gain " + with_error(fit.gain, 1.0, 4, "") + ", noise " + with_error(fit.noise_v, 1e3, 3, " mV") +
                    " RMS, random jitter " + with_error(fit.random_ui, 1.0, 5, " UI") + " RMS (95 %); residual " +
                    fixed(fit.residual, 2) + " standard deviations a point, " + fixed(fit.residual_before, 2) + " before");
    lines.push_back("for the next run: --set receiver.noise='{\"rms_mv\": " + significant(v_to_mv(fit.noise_v.value), 5) +
                    "}' --set jitter.random_ui=" + significant(fit.random_ui.value, 5));
  }
  return lines;
}

std::vector<std::string> summary_lines(const AuditReport& report) {
  const Audit& audit = report.audit;
  const auto passed = std::count_if(audit.lanes.begin(), audit.lanes.end(), [](const AuditedLane& l) { return l.passed; });
  std::vector<std::string> lines;
  std::string limit = fixed(report.options.tolerance_db, 2) + " dB";
  if (report.options.tolerance_v) limit += " and " + mv(*report.options.tolerance_v) + " mV";
  lines.push_back(std::to_string(passed) + " of " + std::to_string(audit.lanes.size()) +
                  " lanes pass: target met and gap to the best at most " + limit + ".");
  if (audit.rank_correlation) {
    lines.push_back("Predicted and measured heights rank alike to " + fixed(*audit.rank_correlation, 2) +
                    " (Spearman; 1 = the same order)" +
                    (audit.gain ? "; measured over predicted " + fixed(*audit.gain, 3) + ", residual " + mv(audit.residual_v.value_or(0.0)) + " mV RMS." : "."));
  }
  for (const std::string& line : audit.remarks) lines.push_back(line);
  return lines;
}

std::string settled_codes(const EyeModel& model, const Settings& settings) {
  std::string text;
  for (const KnobReading& r : readings(model.link.device, settings)) {
    if (r.knob.kind != Knob::Kind::kFir && r.knob.kind != Knob::Kind::kDfe) continue;
    text += (text.empty() ? "" : ", ") + r.knob.name + " " + r.shown;
  }
  return text;
}

}  // namespace

std::string text_of(const AuditReport& report) {
  const Audit& audit = report.audit;
  std::string text = "Audit of " + printable_text(report.table, 200) + "\n\n" + table_text(lanes_table(audit)) + "\n";
  for (const std::string& line : summary_lines(report)) text += item_text("  ", line);
  text += "\nWhere the gap comes from, mV (parts add up to the gap)\n" + table_text(parts_table(audit));
  if (const Rows costs = costs_table(audit); costs.size() > 1) {
    text += "\nWhat restoring one knob alone would win\n" + table_text(costs);
  }
  bool any = false;
  for (const AuditedLane& lane : audit.lanes) {
    for (const std::string& line : lane.remarks) {
      text += (any ? "" : "\nWhat stands out\n") + item_text("  lane " + lane_name(lane.lane) + ": ", line);
      any = true;
    }
  }
  text += "\nWhere least-mean-square adaptation would settle\n";
  for (std::size_t i = 0; i < audit.lanes.size(); ++i) {
    text += item_text("  lane " + lane_name(audit.lanes[i].lane) + ": ", settled_codes((*report.models)[i], audit.lanes[i].adapted.settled));
  }
  if (!report.fits.empty()) {
    text += "\nFitted to the scan\n";
    for (const std::string& line : fit_lines(report)) text += item_text("  ", line);
  }
  any = false;
  for (const AuditedLane& lane : audit.lanes) {
    for (const std::string& line : lane.filled) {
      text += (any ? "" : "\nTaken as given\n") + item_text("  lane " + lane_name(lane.lane) + ": ", line);
      any = true;
    }
  }
  return text + "\n" + item_text("", caution());
}

std::string json_of(const AuditReport& report) {
  Json out;
  out["format"] = "tapwright.audit/1";
  out["version"] = TAPWRIGHT_VERSION;
  out["table"] = report.table;
  out["tolerance_db"] = report.options.tolerance_db;
  if (report.options.tolerance_v) out["tolerance_mv"] = v_to_mv(*report.options.tolerance_v);
  out["passed"] = report.audit.passed();
  out["remarks"] = report.audit.remarks;
  const auto or_null = [](const std::optional<double>& v, double scale = 1.0) { return v ? Json(scale * *v) : Json(nullptr); };
  out["rank_correlation"] = or_null(report.audit.rank_correlation);
  out["measured_over_predicted"] = or_null(report.audit.gain);
  out["residual_mv"] = or_null(report.audit.residual_v, 1e3);
  Json lanes = Json::array();
  for (std::size_t i = 0; i < report.audit.lanes.size(); ++i) {
    const AuditedLane& lane = report.audit.lanes[i];
    const EyeModel& model = (*report.models)[i];
    Json parts;
    for (const Part& part : kParts) parts[part.key] = v_to_mv(lane.parts.*part.value);
    Json costs = Json::array();
    for (const KnobCost& c : lane.costs) {
      costs.push_back({{"knob", c.knob.name}, {"read_back", c.at}, {"best", c.best},
                       {"codes_off", c.codes_off ? Json(*c.codes_off) : Json(nullptr)},
                       {"gain_mv", v_to_mv(c.gain_v)}, {"gain_readapted_mv", v_to_mv(c.gain_readapted_v)}});
    }
    lanes.push_back({{"lane", lane.lane}, {"passed", lane.passed}, {"height_mv", v_to_mv(lane.height_v)},
                     {"best_mv", v_to_mv(lane.best_v)}, {"gap_mv", v_to_mv(lane.gap_v)}, {"gap_db", or_null(lane.gap_db)},
                     {"proof", name_of(lane.best.proof.kind)}, {"read_back", settings_json(model, lane.read_back)},
                     {"best", settings_json(model, lane.best.settings)},
                     {"settled", settings_json(model, lane.adapted.settled)}, {"gap_parts_mv", parts},
                     {"knob_costs", costs}, {"at_rail", lane.at_rail}, {"filled_in", lane.filled},
                     {"measured_height_mv", or_null(lane.measured_height_v, 1e3)},
                     {"measured_width_ui", or_null(lane.measured_width_ui)}, {"remarks", lane.remarks}});
  }
  out["lanes"] = lanes;
  Json fits = Json::array();
  for (const LaneFit& f : report.fits) {
    Json row = {{"lane", f.lane}};
    if (f.fit) {
      const auto value = [&](const FittedValue& v, double scale) {
        return Json{{"value", scale * v.value}, {"standard_error", or_null(v.standard_error, scale)}};
      };
      row["gain"] = value(f.fit->gain, 1.0);
      row["noise_rms_mv"] = value(f.fit->noise_v, 1e3);
      row["random_ui"] = value(f.fit->random_ui, 1.0);
      row["residual"] = f.fit->residual;
      row["residual_before"] = f.fit->residual_before;
      row["points"] = f.fit->num_points;
    } else {
      row["why_not"] = f.why_not;
    }
    fits.push_back(row);
  }
  out["fits"] = fits;
  out["caution"] = caution();
  return out.dump(2, ' ', false, Json::error_handler_t::replace) + "\n";
}

std::string csv_of(const AuditReport& report) {
  std::string text = "lane,passed,height_mv,best_mv,gap_mv,gap_db,proof";
  for (const Part& part : kParts) text += std::string(",") + part.key + "_mv";
  text += ",remarks\n";
  for (const AuditedLane& lane : report.audit.lanes) {
    text += csv_cell(lane.lane) + "," + (lane.passed ? "1" : "0") + "," + exact(v_to_mv(lane.height_v)) + "," +
            exact(v_to_mv(lane.best_v)) + "," + exact(v_to_mv(lane.gap_v)) + "," + (lane.gap_db ? exact(*lane.gap_db) : "") +
            "," + name_of(lane.best.proof.kind);
    for (const Part& part : kParts) text += "," + exact(v_to_mv(lane.parts.*part.value));
    std::string remarks;
    for (const std::string& r : lane.remarks) remarks += (remarks.empty() ? "" : "; ") + r;
    text += "," + csv_cell(remarks) + "\n";
  }
  return text;
}

std::string register_csv_of(const AuditReport& report) {
  std::string text = "lane,field,address,high_bit,low_bit,value\n";
  for (std::size_t i = 0; i < report.audit.lanes.size(); ++i) {
    const AuditedLane& lane = report.audit.lanes[i];
    for (const RegisterWrite& w : register_writes((*report.models)[i].link, lane.best.settings).writes) {
      text += csv_cell(lane.lane) + "," + csv_cell(w.field) + "," + hexadecimal(w.address) + "," + std::to_string(w.high_bit) +
              "," + std::to_string(w.low_bit) + "," + hexadecimal(w.value) + "\n";
    }
  }
  return text;
}

std::string html_of(const AuditReport& report) {
  const Audit& audit = report.audit;
  Page page;
  page.title = "Audit of " + printable_text(report.table, 200);
  page.lead_html = std::string("<p class=\"verdict ") + (audit.passed() ? "good\">Every lane passes." : "bad\">Some lanes fail.") + "</p>\n";

  std::vector<const AuditedLane*> ranked;
  for (const AuditedLane& lane : audit.lanes) ranked.push_back(&lane);
  std::stable_sort(ranked.begin(), ranked.end(), [](const auto* a, const auto* b) { return a->gap_v > b->gap_v; });
  constexpr std::size_t kMostBars = 24;  // more would not be read; the table has them all
  if (ranked.size() > kMostBars) ranked.resize(kMostBars);

  Figure heights;
  heights.id = "lanes";
  heights.title = "Eye at the read-back codes and at the best, largest gap first";
  heights.x = {"eye height (mV)", false, {}, {}};
  heights.summary = "Predicted eye height of each lane at the codes that were read back, and what the best codes would give.";
  Bars bars;
  Bars::Group now{"read back", {}, Eigen::VectorXd(static_cast<Eigen::Index>(ranked.size())), 0};
  Bars::Group best{"best", {}, Eigen::VectorXd(static_cast<Eigen::Index>(ranked.size())), 2};
  for (std::size_t i = 0; i < ranked.size(); ++i) {
    bars.names.push_back("lane " + lane_name(ranked[i]->lane));
    now.to[static_cast<Eigen::Index>(i)] = v_to_mv(ranked[i]->height_v);
    best.to[static_cast<Eigen::Index>(i)] = v_to_mv(ranked[i]->best_v);
  }
  bars.groups = {now, best};
  heights.bars = std::move(bars);
  const double target_v = (*report.models)[0].link.target.eye_height_v;
  if (target_v > 0.0) heights.guides.push_back({"target", true, v_to_mv(target_v)});
  page.figures.push_back(heights);

  Figure parts;
  parts.id = "parts";
  parts.title = "Where the gap comes from";
  parts.x = {"part of the gap (mV)", false, {}, {}};
  parts.summary = "Each lane's gap in the parts that add up to it; a negative part gives something back.";
  Bars part_bars;
  for (const AuditedLane* lane : ranked) part_bars.names.push_back("lane " + lane_name(lane->lane));
  int colour = 0;
  for (const Part& part : kParts) {
    Bars::Group group{part.name, {}, Eigen::VectorXd(static_cast<Eigen::Index>(ranked.size())), colour++};
    for (std::size_t i = 0; i < ranked.size(); ++i) group.to[static_cast<Eigen::Index>(i)] = v_to_mv(ranked[i]->parts.*part.value);
    part_bars.groups.push_back(std::move(group));
  }
  parts.bars = std::move(part_bars);
  page.figures.push_back(parts);

  std::vector<double> predicted;
  std::vector<double> measured;
  for (const AuditedLane& lane : audit.lanes) {
    if (!lane.measured_height_v) continue;
    predicted.push_back(v_to_mv(lane.height_v));
    measured.push_back(v_to_mv(*lane.measured_height_v));
  }
  std::string scatter_html;
  if (!predicted.empty()) {
    Figure scatter;
    scatter.id = "measured";
    scatter.title = "Predicted against measured";
    scatter.x = {"predicted eye height (mV)", false, {}, {}};
    scatter.y = {"measured eye height (mV)", false, {}, {}};
    const auto n = static_cast<Eigen::Index>(predicted.size());
    const Eigen::VectorXd x = Eigen::Map<const Eigen::VectorXd>(predicted.data(), n);
    scatter.series.push_back({"lanes", Series::Kind::kPoints, x, Eigen::Map<const Eigen::VectorXd>(measured.data(), n), 0, false});
    const Eigen::Vector2d ends(std::min(0.0, x.minCoeff()), x.maxCoeff());
    scatter.series.push_back({"measured = predicted", Series::Kind::kLine, ends, ends, 3, true});
    scatter.summary = "One point a lane. Points off the line by a common factor are a matter of gain; one far from the others is a lane to look at.";
    scatter_html = figure_html(scatter);
    page.figures.push_back(std::move(scatter));
  }

  std::vector<std::string> remarks = summary_lines(report);
  for (const AuditedLane& lane : audit.lanes) {
    for (const std::string& line : lane.remarks) remarks.push_back("lane " + lane_name(lane.lane) + ": " + line);
  }
  page.sections.push_back({"verdict", "Verdict", list_html(remarks)});
  page.sections.push_back({"lanes-ranked", "Lanes", figure_html(heights) + table_html(lanes_table(audit), {"All lanes", true, {}})});
  page.sections.push_back({"gap", "Where the gap comes from", figure_html(parts) + table_html(parts_table(audit), {"Parts of the gap (mV)", true, {}})});
  if (const Rows costs = costs_table(audit); costs.size() > 1) {
    page.sections.push_back({"knobs", "What one knob would win", table_html(costs, {"Restoring one knob alone", true, {false, false, true, true, true, true, true}})});
  }
  if (!scatter_html.empty() || !report.fits.empty()) {
    page.sections.push_back({"against-measured", "Against measurement", scatter_html + list_html(fit_lines(report))});
  }
  std::vector<std::string> filled;
  for (const AuditedLane& lane : audit.lanes) {
    for (const std::string& line : lane.filled) filled.push_back("lane " + lane_name(lane.lane) + ": " + line);
  }
  if (!filled.empty()) page.sections.push_back({"given", "Taken as given", list_html(filled)});
  return page_html(page);
}

}  // namespace tapwright
