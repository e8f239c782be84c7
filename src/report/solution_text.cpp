#include <algorithm>
#include <cmath>

#include "report/text_table.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/link/register_writes.hpp"
#include "tapwright/report/solution_report.hpp"

namespace tapwright {
namespace {

using Rows = std::vector<std::vector<std::string>>;

std::string mv(double v) { return fixed(v_to_mv(v), 1); }
std::string mv(const std::optional<double>& v) { return v ? mv(*v) : "-"; }
std::string change_mv(double v) {
  const std::string text = mv(v);
  return text.starts_with('-') || text == "0.0" ? text : "+" + text;
}

std::string codes_section(const EyeModel& model, const Settings& settings) {
  Rows rows{{"knob", "value", "code", ""}};
  for (const KnobReading& r : readings(model.link.device, settings)) {
    rows.push_back({r.knob.name, r.shown, r.code ? std::to_string(*r.code) : "-",
                    r.at_least == r.at_most ? "" : r.at_least ? "lowest" : "highest"});
  }
  const double phase_ui = static_cast<double>(settings.phase_samples) / model.link.samples_per_ui;
  rows.push_back({"sampling", fixed(phase_ui, 3) + " UI", "-", ""});
  std::string text = "Set these\n" + table_text(rows);
  text += "  (sampling counts from the peak of the pulse before FIR and DFE)\n";

  const RegisterWrites registers = register_writes(model.link, settings);
  if (!registers.writes.empty() || !registers.notes.empty()) {
    Rows writes{{"field", "address", "bits", "value"}};
    for (const RegisterWrite& w : registers.writes) {
      const std::string bits = w.high_bit == w.low_bit ? std::to_string(w.high_bit)
                                                       : std::to_string(w.high_bit) + ":" +
                                                             std::to_string(w.low_bit);
      writes.push_back({w.field, hexadecimal(w.address), bits, hexadecimal(w.value)});
    }
    text += "\nRegister writes\n" + table_text(writes);
    for (const Diagnostic& note : registers.notes) text += item_text("  ", note.message);
  }
  return text;
}

std::string eye_section(const SolutionReport& report) {
  const EyeModel& model = *report.model;
  const Solution& s = report.solution;
  const Target& target = model.link.target;
  const Score* before = nullptr;
  for (const Compared& c : s.compared) {
    if (c.name == "no equalization" && c.score) before = &*c.score;
  }
  const bool worst = model.link.objective == ObjectiveKind::kWorstCase;
  const std::string at = "height at error ratio " + significant(target.error_ratio, 3);
  const auto cell = [&](const auto& of) { return before != nullptr ? of(*before) : std::string("-"); };
  const auto ui = [](const std::optional<double>& v) { return v ? fixed(*v, 3) : std::string("-"); };
  const std::string want_height = mv(target.eye_height_v);
  Rows rows{{"", "unequalised", "now", "target"}};
  rows.push_back({"height, worst case, mV",
                  cell([](const Score& x) { return mv(x.height.worst_case_v); }),
                  mv(s.score.height.worst_case_v), worst ? want_height : ""});
  rows.push_back({at + ", mV", cell([](const Score& x) { return mv(x.height.at_error_ratio_v); }),
                  mv(s.score.height.at_error_ratio_v), worst ? "" : want_height});
  rows.push_back({"width, worst case, UI",
                  cell([&](const Score& x) { return ui(x.eye_width_worst_case_ui); }),
                  ui(s.score.eye_width_worst_case_ui),
                  worst && target.eye_width_ui > 0.0 ? fixed(target.eye_width_ui, 3) : ""});
  rows.push_back({"width at the error ratio, UI",
                  cell([&](const Score& x) { return ui(x.eye_width_ui); }), ui(s.score.eye_width_ui),
                  !worst && target.eye_width_ui > 0.0 ? fixed(target.eye_width_ui, 3) : ""});
  if (s.score.ratio_db) {
    rows.push_back({"signal over disturbance, dB",
                    cell([](const Score& x) { return x.ratio_db ? fixed(*x.ratio_db, 2) : "-"; }),
                    fixed(*s.score.ratio_db, 2), ""});
  }
  if (s.score.peak_input_limit_v) {
    rows.push_back({"receiver input, mVppd",
                    cell([](const Score& x) { return fixed(peak_v_to_mvppd(x.peak_input_v), 0); }),
                    fixed(peak_v_to_mvppd(s.score.peak_input_v), 0),
                    "<= " + fixed(peak_v_to_mvppd(*s.score.peak_input_limit_v), 0)});
  }
  std::string text = "Eye\n" + table_text(rows);
  if (s.score.target_met()) {
    text += "  The target is met.\n";
  } else {
    for (const std::string& line : s.score.missed) text += item_text("  Target missed: ", line);
  }
  return text;
}

std::string compared_section(const SolutionReport& report) {
  Rows rows{{"method", "eye, mV", "of the best"}};
  const bool worst = report.model->link.objective == ObjectiveKind::kWorstCase;
  const auto height = [&](const Score& s) {
    return worst ? s.height.worst_case_v : s.height.at_error_ratio_v.value_or(s.height.worst_case_v);
  };
  const double best_v = height(report.solution.score);
  std::string notes;
  for (const Compared& c : report.solution.compared) {
    if (!c.score) {
      rows.push_back({c.name, "-", ""});
      notes += item_text("  " + c.name + ": ", c.note);
      continue;
    }
    const double h = height(*c.score);
    rows.push_back({c.name, mv(h), best_v > 0.0 && h > 0.0 ? fixed(100.0 * h / best_v, 0) + " %" : ""});
  }
  rows.push_back({"this answer", mv(best_v), best_v > 0.0 ? "100 %" : ""});
  return "Methods compared\n" + table_text(rows) + notes;
}

/// From the main cursor down to the eye that is left, both sides of the inner eye counted.
std::string budget_section(const SolutionReport& report) {
  const Score& s = report.solution.score;
  Rows rows{{"main cursor opens", mv(2.0 * s.signal_v) + " mV"}};
  const auto take = [&](const std::string& what, double half_v) {
    if (half_v > 0.0) rows.push_back({what, mv(-2.0 * half_v) + " mV"});
  };
  take("residual intersymbol interference", s.isi_v);
  for (std::size_t i = 0; i < s.aggressors_v.size(); ++i) {
    take("crosstalk, " + printable_text(report.model->link.crosstalk[i].name, 30), s.aggressors_v[i]);
  }
  take("dual-Dirac jitter", s.dual_dirac_v);
  take("noise and random jitter, " + mv(s.sigma_v) + " mV RMS", s.gaussian_v);
  take("slicer sensitivity", s.sensitivity_v);
  const double left_v = 2.0 * (s.signal_v - s.isi_v - s.crosstalk_v - s.dual_dirac_v - s.gaussian_v - s.sensitivity_v);
  rows.push_back({"left, worst case", mv(left_v) + " mV"});
  std::string text = "What holds it back\n" + table_text(rows);
  // Under a mask the height is the least over phases, and this the budget of one.
  if (left_v - s.height.worst_case_v > 1e-9) text += "  (at the sampling instant; the score is the least under the mask)\n";
  for (const std::string& line : report.limited_by) text += item_text("  ", line);
  return text;
}

std::string sensitivity_section(const std::vector<KnobSensitivity>& all) {
  Rows rows{{"knob", "at", "-1 code", "+1 code", "-1, DFE follows", "+1, DFE follows"}};
  for (const KnobSensitivity& s : all) {
    if (!s.down && !s.up) continue;
    const auto cell = [](const std::optional<KnobSensitivity::Change>& c, bool follows) {
      return c ? change_mv(follows ? c->readapted_v : c->fixed_v) : std::string("limit");
    };
    rows.push_back({s.knob.name, s.shown, cell(s.down, false), cell(s.up, false), cell(s.down, true),
                    cell(s.up, true)});
  }
  if (rows.size() == 1) return "";
  return "One code either way, change of the eye in mV\n" + table_text(rows);
}

std::string parameters_section(const ParameterStudy& study) {
  Rows rows{{"parameter", "off by", "less", "more", "less, follows", "more, follows"}};
  for (const ParameterSensitivity& p : study.parameters) {
    const auto cell = [](const std::optional<StrayedEye>& eye, bool follows) {
      return eye ? change_mv(follows ? eye->readapted_v : eye->fixed_v) : std::string("-");
    };
    rows.push_back({p.parameter.name, p.parameter.spread, cell(p.low, false), cell(p.high, false),
                    cell(p.low, true), cell(p.high, true)});
  }
  std::string text = "When channel or devices are off, change of the eye in mV\n" + table_text(rows);
  text += item_text("  ", "Spreads are round figures of common practice; \"follows\": DFE and "
                          "sampling instant adapt. A one-sided parameter stands under \"more\".");
  for (const std::string& sentence : study.sentences) text += item_text("  ", sentence);
  text += "\nAll off at once\n";
  Rows all{{"", "eye, mV", "DFE follows", "target"}};
  for (const Corner& c : study.corners) {
    all.push_back({c.name, mv(c.eye.fixed_v), mv(c.eye.readapted_v), c.met ? "met" : "missed"});
  }
  text += table_text(all);
  if (study.draws) {
    const Draws& d = *study.draws;
    text += item_text("  ", "Of " + std::to_string(d.count) + " random draws (seed " +
                                std::to_string(d.seed) + ") " + std::to_string(d.met) +
                                " meet the target, " + std::to_string(d.met_fixed) +
                                " with every knob fixed; least eye " + mv(d.least_v) +
                                " mV, median " + mv(d.median_v) + " mV.");
  }
  for (const Alternative& a : study.alternatives) {
    text += item_text("  ", "The " + a.name + " setting costs " +
                                mv(study.nominal_v - a.height_v) + " mV on the link as described: " +
                                a.note + ".");
  }
  return text;
}

}  // namespace

std::string signal_line(const Link& link) {
  const Signal& signal = link.signal;
  std::string text = significant(signal.symbol_rate_bd * 1e-9, 6) + " GBd, PAM-" +
                     std::to_string(signal.levels);
  switch (signal.line_code.kind) {
    case LineCodeKind::kNone: break;
    case LineCodeKind::k8b10b: text += ", 8b10b"; break;
    case LineCodeKind::k64b66b: text += ", 64b66b"; break;
    case LineCodeKind::kManchester: text += ", Manchester"; break;
    case LineCodeKind::kStateMachine: text += ", line code as given"; break;
  }
  return text;
}


std::vector<std::string> proof_lines(const Proof& proof) {
  std::vector<std::string> lines;
  switch (proof.kind) {
    case Proof::Kind::kProven:
      lines.push_back("Proven: no setting within the limits opens the eye further than " + mv(proof.bound_v) + " mV (gap " +
                      fixed(v_to_mv(proof.gap_v), 3) + " mV): " + proof.reason + ".");
      break;
    case Proof::Kind::kBounded:
      lines.push_back("Bounded: no setting within the limits opens the eye further than " + mv(proof.bound_v) +
                      " mV; at most " + mv(proof.gap_v) + " mV are left: " + proof.reason + ".");
      break;
    case Proof::Kind::kExhausted: lines.push_back("Exhausted: " + proof.reason + "."); break;
    case Proof::Kind::kNone:
      if (!proof.reason.empty()) lines.push_back("No claim: " + proof.reason + ".");
      break;
  }
  if (proof.num_cells > 0) {
    lines.push_back(std::to_string(proof.num_cells) + " combinations of swing, CTLE state and sampling instant, " +
                    std::to_string(proof.num_nodes) + " boxes of FIR codes, " + std::to_string(proof.num_settings) +
                    " settings scored.");
  }
  return lines;
}

std::vector<std::string> assumption_lines(const SolutionReport& report) {
  const EyeModel& model = *report.model;
  std::vector<std::string> lines;
  lines.push_back("span: " + std::to_string(model.span_ui[0]) + " UI before and " + std::to_string(model.span_ui[1]) +
                  " UI after the sampling instant (" + model.span_reason + "); outside it at most " +
                  fixed(v_to_mv(2.0 * report.solution.score.outside_span_v), 2) + " mV of eye");
  for (const InputFile& input : model.link.inputs) {
    lines.push_back(printable_text(input.path, 200) + ", sha256 " + input.sha256.substr(0, 16));
  }
  for (const auto* notes : {&model.link.warnings, &model.warnings, &report.solution.warnings}) {
    for (const Diagnostic& note : *notes) lines.push_back("note: " + note.message);
  }
  return lines;
}

std::string caution() {
  return "A prediction is no measurement: confirm with an error-ratio test. Keep launch and input "
         "amplitudes inside the devices' absolute limits; local codes, emission limits and licensed "
         "practice apply.";
}

SolutionReport report_on(const EyeModel& model, Solution solution) {
  SolutionReport report{&model, std::move(solution), {}, {}, {}};
  report.sensitivity = knob_sensitivity(model, report.solution.settings);
  report.limited_by = what_limits(model, report.solution.settings, report.solution.score);
  return report;
}

std::string text_of(const SolutionReport& report) {
  const EyeModel& model = *report.model;
  const Solution& s = report.solution;
  const std::string name = model.link.name.empty() ? "link" : printable_text(model.link.name, 200);
  std::string text = name + "\n" + signal_line(model.link) + "\n\n";
  text += codes_section(model, s.settings) + "\n" + eye_section(report) + "\n";
  if (const auto lines = proof_lines(s.proof); !lines.empty()) {
    text += "How sure\n";
    for (const std::string& line : lines) text += item_text("  ", line);
    text += "\n";
  }
  if (!s.compared.empty()) text += compared_section(report) + "\n";
  const std::string steps = sensitivity_section(report.sensitivity);
  if (!steps.empty()) text += steps + "\n";
  if (report.parameters) text += parameters_section(*report.parameters) + "\n";
  text += budget_section(report);
  text += "\nTaken as given\n";
  for (const std::string& line : assumption_lines(report)) text += item_text("  ", line);
  return text + "\n" + item_text("", caution());
}

}  // namespace tapwright
