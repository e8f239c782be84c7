#include <algorithm>
#include <cmath>

#include "report/escape.hpp"
#include "report/page.hpp"
#include "tapwright/base/normal.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/eye/line_code.hpp"
#include "tapwright/eye/placed_eye.hpp"
#include "tapwright/link/register_writes.hpp"
#include "tapwright/report/html_report.hpp"

namespace tapwright {
namespace {

using Json = nlohmann::ordered_json;
using Rows = std::vector<std::vector<std::string>>;

std::string mv(double v) { return fixed(v_to_mv(v), 1); }
std::string mv(const std::optional<double>& v) { return v ? mv(*v) : "-"; }

/// Pulses as whole numbers of this unit: 2000 of them add up to less than 0.1 mV of rounding.
constexpr double kPulseUnitV = 5e-8;
/// Pulses of at most so many CTLE states go into a page, nearest to the answer first.
constexpr std::size_t kMostTrialSamples = 160000;

Json pulse_json(const PulseResponse& pulse, Eigen::Index first, Eigen::Index count) {
  Json out = Json::array();
  for (Eigen::Index i = first; i < first + count; ++i) {
    out.push_back(static_cast<long long>(std::llround(pulse.at(i) / kPulseUnitV)));
  }
  return out;
}

Json code_json(const EyeModel& model) {
  const LineCode code = LineCode::from(model.link.signal.line_code, model.link.signal.levels);
  if (code.independent()) return nullptr;
  Json sections = Json::array();
  for (const LineCode::Section& s : code.sections()) {
    Json branches = Json::array();
    for (const LineCode::Branch& b : s.branches) {
      branches.push_back({{"from", b.from}, {"to", b.to}, {"first", b.first}, {"last", b.last}});
    }
    Json words = Json::array();
    for (Eigen::Index w = 0; w < s.words.cols(); ++w) {
      Json word = Json::array();
      for (const double symbol : s.words.col(w)) word.push_back(symbol);
      words.push_back(std::move(word));
    }
    sections.push_back({{"length", s.num_symbols()}, {"num_from", s.num_from}, {"num_to", s.num_to},
                        {"branches", branches}, {"words", words}});
  }
  return {{"period", code.period()}, {"sections", sections}};
}

/// What "try a setting" needs to compute the worst case by itself; null when the pulses of even one
/// state would make the page too large.
Json trial_json(const SolutionReport& report, std::vector<std::size_t>* states_shown) {
  const EyeModel& model = *report.model;
  const Link& link = model.link;
  const Device& device = link.device;
  const Settings& settings = report.solution.settings;
  const int per_ui = model.input.samples_per_ui();
  const int num_taps_wide = 2 * 8;
  const Eigen::Index window = (model.span_ui[0] + model.span_ui[1] + 5 + num_taps_wide) * per_ui;
  std::size_t samples_of_state = static_cast<std::size_t>(window);
  for (const PulseResponse& a : model.states[settings.ctle_index].aggressors) {
    samples_of_state += static_cast<std::size_t>(a.size());
  }
  if (samples_of_state > 2 * kMostTrialSamples) return nullptr;
  const std::size_t most = std::max<std::size_t>(1, kMostTrialSamples / samples_of_state);
  std::vector<std::size_t> order(model.states.size());
  for (std::size_t i = 0; i < order.size(); ++i) order[i] = i;
  const auto distance = [&](std::size_t i) {
    return i > settings.ctle_index ? i - settings.ctle_index : settings.ctle_index - i;
  };
  std::stable_sort(order.begin(), order.end(),
                   [&](std::size_t a, std::size_t b) { return distance(a) < distance(b); });
  order.resize(std::min(order.size(), most));
  std::sort(order.begin(), order.end());
  *states_shown = order;

  const PlacedEye eye = place_eye(model, {settings.swing_index, settings.ctle_index, settings.phase_samples});
  Json out;
  out["samples_per_ui"] = per_ui;
  out["span_ui"] = model.span_ui;
  out["unit_v"] = kPulseUnitV;
  Json swings = Json::array();
  for (const Swing& s : device.transmitter.swings) swings.push_back(s.value);
  out["swings_v"] = swings;
  Json taps = Json::array();
  for (const FirTap& tap : device.transmitter.fir.taps) {
    Json codes = nullptr;
    if (!tap.codes.empty()) {
      codes = Json::array();
      for (const Code& c : tap.codes) codes.push_back(c.value);
    }
    taps.push_back({{"position", tap.position}, {"codes", codes}, {"min", tap.min}, {"max", tap.max},
                    {"is_remainder", tap.is_remainder}});
  }
  out["taps"] = taps;
  out["peak_limit"] = device.transmitter.fir.peak_limit;
  Json dfe = Json::array();
  for (const DfeTap& tap : device.receiver.dfe) {
    Json codes = nullptr;
    if (!tap.codes.empty()) {
      codes = Json::array();
      for (const Code& c : tap.codes) codes.push_back(c.value);
    }
    dfe.push_back({{"position", tap.position}, {"max", tap.max}, {"relative", tap.relative}, {"codes", codes}});
  }
  out["dfe"] = dfe;
  Json states = Json::array();
  std::size_t answer_state = 0;
  for (const std::size_t i : order) {
    const StatePulses& state = model.states[i];
    const Eigen::Index first = std::max<Eigen::Index>(0, state.peak_index() - (model.span_ui[0] + 2) * per_ui);
    Json aggressors = Json::array();
    for (const PulseResponse& a : state.aggressors) aggressors.push_back(pulse_json(a, 0, a.size()));
    if (i == settings.ctle_index) answer_state = states.size();
    states.push_back({{"index", i},
                      {"peak_index", state.peak_index() - first},
                      {"noise_v", state.noise_v},
                      {"pulse", pulse_json(state.victim, first, std::min(window, state.victim.size() - first))},
                      {"aggressors", aggressors}});
  }
  out["states"] = states;
  Json aggressors = Json::array();
  for (const Aggressor& a : link.crosstalk) {
    Json fir = nullptr;
    if (a.fixed_fir) fir = std::vector<double>(a.fixed_fir->begin(), a.fixed_fir->end());
    aggressors.push_back({{"fir", fir},
                          {"amplitude_v", a.amplitude_v ? Json(*a.amplitude_v) : Json(nullptr)},
                          {"ui_ratio", a.ui_ratio}});
  }
  out["aggressors"] = aggressors;
  out["code"] = code_json(model);
  const double levels = link.signal.levels;
  out["signal_share"] = (link.signal.levels == 2 ? 1.0 : link.signal.level_mismatch) / (levels - 1.0);
  out["symbol_variance"] = (levels * levels - 1.0) / (3.0 * (levels - 1.0) * (levels - 1.0));
  const bool has_jitter = per_ui >= kLeastSamplesPerUi;
  out["random_ui"] = has_jitter ? link.jitter.random_ui : 0.0;
  out["dual_dirac_peak_ui"] = has_jitter ? link.jitter.dual_dirac_peak_ui : 0.0;
  out["quantile"] = eye.quantile;
  out["transmitter_noise_ratio"] = eye.transmitter_noise_ratio;
  out["sensitivity_v"] = device.receiver.sensitivity_v;
  out["mask_reach"] = (static_cast<int>(eye.phases.size()) - 1) / 2;
  out["height_v"] = report.solution.score.height.worst_case_v;
  out["residual_v"] = std::vector<double>(report.solution.score.residual_v.values.begin(),
                                          report.solution.score.residual_v.values.end());
  out["answer"] = {{"swing", settings.swing_index},
                   {"state", answer_state},
                   {"phase", settings.phase_samples},
                   {"fir", std::vector<double>(settings.fir.begin(), settings.fir.end())},
                   {"dfe_v", std::vector<double>(settings.dfe_v.begin(), settings.dfe_v.end())}};
  return out;
}

std::string option_html(std::size_t value, const std::string& label, bool selected) {
  return "<option value=\"" + std::to_string(value) + "\"" + (selected ? " selected" : "") + ">" +
         markup_escaped(label) + "</option>";
}

std::string trial_html(const SolutionReport& report, const std::vector<std::size_t>& states) {
  const EyeModel& model = *report.model;
  const Device& device = model.link.device;
  const Settings& settings = report.solution.settings;
  const int per_ui = model.input.samples_per_ui();
  std::string out = "<div class=\"columns\"><div><div class=\"knobs\">\n";
  out += "<label for=\"trial-swing\">swing</label><select id=\"trial-swing\">";
  for (std::size_t i = 0; i < device.transmitter.swings.size(); ++i) {
    out += option_html(i, significant(peak_v_to_mvppd(device.transmitter.swings[i].value), 6) + " mVppd",
                       i == settings.swing_index);
  }
  out += "</select><span></span>\n";
  for (std::size_t i = 0; i < device.transmitter.fir.taps.size(); ++i) {
    const FirTap& tap = device.transmitter.fir.taps[i];
    const std::string id = "trial-fir-" + std::to_string(i);
    const std::string name = "FIR tap " + std::to_string(tap.position);
    const double value = settings.fir[static_cast<Eigen::Index>(i)];
    if (tap.is_remainder) {
      out += "<span>" + name + "</span><span class=\"soft\">what the others leave</span>";
    } else if (tap.codes.empty()) {
      out += "<label for=\"" + id + "\">" + name + "</label><input type=\"range\" id=\"" + id + "\" min=\"" + exact(tap.min) +
             "\" max=\"" + exact(tap.max) + "\" step=\"" + exact(std::max((tap.max - tap.min) / 200.0, 1e-6)) +
             "\" value=\"" + exact(value) + "\">";
    } else {
      out += "<label for=\"" + id + "\">" + name + "</label><input type=\"range\" id=\"" + id + "\" min=\"0\" max=\"" +
             std::to_string(tap.codes.size() - 1) + "\" step=\"1\" value=\"" +
             std::to_string(nearest_code(tap.codes, value)) + "\">";
    }
    out += "<output id=\"" + id + "-out\" for=\"" + id + "\"></output>\n";
  }
  out += "<label for=\"trial-state\">CTLE state</label><select id=\"trial-state\">";
  for (std::size_t i = 0; i < states.size(); ++i) {
    const CtleState& state = device.receiver.ctle[states[i]];
    out += option_html(i, state.label + (state.gain ? ", gain code " + std::to_string(state.gain->code) : ""),
                       states[i] == settings.ctle_index);
  }
  out += "</select><span></span>\n<label for=\"trial-dfe\">DFE on</label><span><input type=\"checkbox\" id=\"trial-dfe\" checked>"
         "</span><output id=\"trial-dfe-values\"></output>\n";
  out += "<label for=\"trial-phase\">sampling</label><input type=\"range\" id=\"trial-phase\" min=\"" + std::to_string(-per_ui) +
         "\" max=\"" + std::to_string(per_ui) + "\" step=\"1\" value=\"" + std::to_string(settings.phase_samples) +
         "\"><output id=\"trial-phase-out\" for=\"trial-phase\"></output>\n</div>\n"
         "<p><button type=\"button\" id=\"trial-reset\">Back to the answer</button></p></div>\n"
         "<div aria-live=\"polite\"><p class=\"verdict\">Eye height, worst case: <span id=\"trial-height\"></span></p>"
         "<p>against the answer: <span id=\"trial-change\"></span></p><p id=\"trial-limit\" class=\"soft\"></p></div></div>\n"
         "<figure id=\"trial-pulse\"><h3>Cursors of this setting</h3><div class=\"plot\"><canvas role=\"img\" aria-label=\"Cursors "
         "after FIR and DFE of the setting above, beside those of the answer\"></canvas></div></figure>\n";
  std::string note = "The page computes the worst case itself from the pulses in it, by the program's definitions, with "
                     "the DFE settled at the sampling instant once a knob is moved.";
  if (states.size() < device.receiver.ctle.size()) {
    note += " To keep the file small it holds the " + std::to_string(states.size()) + " CTLE states nearest to the answer of " +
            std::to_string(device.receiver.ctle.size()) + ".";
  }
  return out + paragraph_html(note);
}

std::string settings_html(const EyeModel& model, const Settings& settings) {
  Rows rows{{"knob", "value", "code", "at the end of its range"}};
  for (const KnobReading& r : readings(model.link.device, settings)) {
    rows.push_back({r.knob.name, r.shown, r.code ? std::to_string(*r.code) : "-",
                    r.at_least == r.at_most ? "" : r.at_least ? "lowest" : "highest"});
  }
  rows.push_back({"sampling", fixed(static_cast<double>(settings.phase_samples) / model.link.samples_per_ui, 3) + " UI", "-", ""});
  std::string out = "<div class=\"columns\">" + table_html(rows, {"Codes", false, {}});
  const RegisterWrites registers = register_writes(model.link, settings);
  if (!registers.writes.empty()) {
    Rows writes{{"field", "address", "bits", "value"}};
    for (const RegisterWrite& w : registers.writes) {
      writes.push_back({w.field, hexadecimal(w.address),
                        w.high_bit == w.low_bit ? std::to_string(w.high_bit)
                                                : std::to_string(w.high_bit) + ":" + std::to_string(w.low_bit),
                        hexadecimal(w.value)});
    }
    out += table_html(writes, {"Register writes", false, {}});
  }
  out += "</div>\n";
  for (const Diagnostic& note : registers.notes) out += paragraph_html(note.message);
  return out + paragraph_html("Sampling counts from the peak of the pulse before FIR and DFE.");
}

std::string eye_html(const SolutionReport& report) {
  const Score& s = report.solution.score;
  const Target& target = report.model->link.target;
  const bool worst = report.model->link.objective == ObjectiveKind::kWorstCase;
  const auto ui = [](const std::optional<double>& v) { return v ? fixed(*v, 3) : std::string("-"); };
  const std::string height = mv(target.eye_height_v);
  const std::string width = target.eye_width_ui > 0.0 ? fixed(target.eye_width_ui, 3) : "";
  Rows rows{{"", "this answer", "target"},
            {"eye height, worst case (mV)", mv(s.height.worst_case_v), worst ? height : ""},
            {"eye height at error ratio " + significant(target.error_ratio, 3) + " (mV)", mv(s.height.at_error_ratio_v), worst ? "" : height},
            {"eye width, worst case (UI)", ui(s.eye_width_worst_case_ui), worst ? width : ""},
            {"eye width at the error ratio (UI)", ui(s.eye_width_ui), worst ? "" : width},
            {"signal over disturbance (dB)", s.ratio_db ? fixed(*s.ratio_db, 2) : "-", ""},
            {"eye height with the DFE where adaptation settles, worst case (mV)", mv(s.settled.worst_case_v), ""},
            {"receiver input (mVppd)", fixed(peak_v_to_mvppd(s.peak_input_v), 0),
             s.peak_input_limit_v ? "at most " + fixed(peak_v_to_mvppd(*s.peak_input_limit_v), 0) : ""}};
  return table_html(rows, {"", false, {}});
}

}  // namespace

std::string html_of(const SolutionReport& report) {
  const EyeModel& model = *report.model;
  const Solution& s = report.solution;
  Page page;
  page.title = model.link.name.empty() ? "Link settings" : printable_text(model.link.name, 20000);
  page.figures = figures_of(report);
  const auto figure = [&](const std::string& id) -> std::string {
    for (const Figure& f : page.figures) {
      if (f.id == id) return figure_html(f);
    }
    return "";
  };

  page.lead_html = "<p class=\"soft\">" + markup_escaped(signal_line(model.link)) + "</p>\n";
  page.sections.push_back({"set-these", "Set these", settings_html(model, s.settings)});

  std::string verdict = s.score.target_met() ? "<p class=\"verdict good\">The target is met.</p>\n"
                                             : "<p class=\"verdict bad\">The target is missed.</p>\n";
  verdict += list_html(s.score.missed);
  for (const std::string& line : proof_lines(s.proof)) verdict += paragraph_html(line);
  verdict += eye_html(report);
  page.sections.push_back({"verdict", "Verdict and proof", verdict});
  page.sections.push_back({"where", "Where the eye goes", figure("budget") + list_html(report.limited_by)});
  page.sections.push_back({"pulses", "Pulse and frequency response", figure("pulse") + figure("frequency")});
  const std::string eyes = figure("eye") + figure("bathtub-phase") + figure("bathtub-voltage");
  if (!eyes.empty()) page.sections.push_back({"open", "How open, how likely", eyes});

  std::vector<std::size_t> states;
  Json trial = trial_json(report, &states);
  if (!trial.is_null()) {
    page.extra = {{"trial", std::move(trial)}};
    page.with_trial = true;
    page.sections.push_back({"try", "Try a setting", trial_html(report, states)});
  }
  std::string methods = figure("methods");
  std::vector<std::string> notes;
  for (const Compared& c : s.compared) {
    if (!c.note.empty()) notes.push_back(c.name + ": " + c.note);
  }
  methods += list_html(notes);
  if (!methods.empty()) page.sections.push_back({"compared", "Other ways to set it", methods});
  if (const std::string steps = figure("steps"); !steps.empty()) {
    page.sections.push_back({"sensitivity", "How sharp the settings are", steps});
  }
  page.sections.push_back({"given", "Taken as given", list_html(assumption_lines(report))});
  return page_html(page);
}

}  // namespace tapwright
