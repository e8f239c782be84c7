#include <cmath>
#include <nlohmann/json.hpp>

#include "report/settings_json.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/eye/baseline_wander.hpp"
#include "tapwright/eye/error_bursts.hpp"
#include "tapwright/link/register_writes.hpp"
#include "tapwright/report/solution_report.hpp"

namespace tapwright {
namespace {

using Json = nlohmann::ordered_json;

Json mv(double v) { return v_to_mv(v); }
Json mv(const std::optional<double>& v) { return v ? Json(v_to_mv(*v)) : Json(nullptr); }
Json or_null(const std::optional<double>& v) { return v ? Json(*v) : Json(nullptr); }

Json score_json(const Score& s) {
  Json aggressors = Json::array();
  for (const double v : s.aggressors_v) aggressors.push_back(v_to_mv(v));
  Json settled = Json::array();
  for (const double v : s.settled_dfe_v) settled.push_back(v_to_mv(v));
  return {{"eye_height_worst_case_mv", mv(s.height.worst_case_v)},
          {"eye_height_at_error_ratio_mv", mv(s.height.at_error_ratio_v)},
          {"eye_width_worst_case_ui", or_null(s.eye_width_worst_case_ui)},
          {"eye_width_ui", or_null(s.eye_width_ui)},
          {"ratio_db", or_null(s.ratio_db)},
          {"main_cursor_mv", mv(s.main_cursor_v)},
          {"budget_mv",
           {{"signal", mv(s.signal_v)},
            {"isi", mv(s.isi_v)},
            {"isi_independent_symbols", mv(s.isi_independent_v)},
            {"crosstalk", mv(s.crosstalk_v)},
            {"crosstalk_of_each", aggressors},
            {"dual_dirac", mv(s.dual_dirac_v)},
            {"gaussian", mv(s.gaussian_v)},
            {"sigma", mv(s.sigma_v)},
            {"sigma_receiver", mv(s.sigma_receiver_v)},
            {"sigma_transmitter", mv(s.sigma_transmitter_v)},
            {"sigma_jitter", mv(s.sigma_jitter_v)},
            {"sensitivity", mv(s.sensitivity_v)}}},
          {"with_settled_dfe",
           {{"dfe_mv", settled},
            {"eye_height_worst_case_mv", mv(s.settled.worst_case_v)},
            {"eye_height_at_error_ratio_mv", mv(s.settled.at_error_ratio_v)}}},
          {"peak_input_mvppd", peak_v_to_mvppd(s.peak_input_v)},
          {"outside_span_mv", mv(s.outside_span_v)},
          {"target_met", s.target_met()},
          {"missed", s.missed}};
}

/// The symbols as digits, 0 the lowest level: what a pattern generator sends to see the worst case.
Json worst_sequence_json(const Score& s, int levels) {
  std::string digits;
  for (const double symbol : s.worst_sequence) {
    digits += static_cast<char>('0' + std::lround((symbol + 1.0) / 2.0 * (levels - 1)));
  }
  Json out = {{"symbols", digits}, {"main_at", s.worst_sequence_main}};
  if (!s.worst_characters.empty()) out["characters"] = s.worst_characters;
  return out;
}

Json wander_json(const BaselineWander& w) {
  return {{"worst", mv(w.worst_v)},
          {"rms", mv(w.rms_v)},
          {"mean", mv(w.mean_v)},
          {"worst_independent_symbols", mv(w.worst_independent_v)},
          {"rms_independent_symbols", mv(w.rms_independent_v)}};
}

Json bursts_json(const ErrorBursts& b) {
  std::vector<double> lengths(b.length_probability.begin(), b.length_probability.end());
  while (lengths.size() > 1 && lengths.back() < 1e-12) lengths.pop_back();
  return {{"length_probability", lengths},
          {"mean_length", b.mean_length},
          {"mean_errors", b.mean_errors},
          {"error_ratio_without_feedback", b.start_probability},
          {"error_ratio", b.error_ratio}};
}

Json proof_json(const Proof& proof) {
  const bool claims = proof.kind != Proof::Kind::kNone;
  return {{"kind", name_of(proof.kind)},
          {"bound_mv", claims ? mv(proof.bound_v) : Json(nullptr)},
          {"gap_mv", claims ? mv(proof.gap_v) : Json(nullptr)},
          {"searched",
           {{"cells", proof.num_cells}, {"nodes", proof.num_nodes}, {"settings", proof.num_settings}}},
          {"reason", proof.reason}};
}

Json change_json(const std::optional<KnobSensitivity::Change>& change) {
  if (!change) return nullptr;
  return {{"fixed_mv", mv(change->fixed_v)}, {"readapted_mv", mv(change->readapted_v)}};
}

Json eye_json(const std::optional<StrayedEye>& eye) {
  if (!eye) return nullptr;
  return {{"fixed_mv", mv(eye->fixed_v)}, {"readapted_mv", mv(eye->readapted_v)}};
}

Json parameters_json(const EyeModel& model, const ParameterStudy& study) {
  Json parameters = Json::array();
  for (const ParameterSensitivity& p : study.parameters) {
    parameters.push_back({{"parameter", p.parameter.name},
                          {"spread", p.parameter.spread},
                          {"down", eye_json(p.low)},
                          {"up", eye_json(p.high)}});
  }
  Json corners = Json::array();
  for (const Corner& c : study.corners) {
    Json strays = Json::object();
    for (std::size_t i = 0; i < c.strays.size(); ++i) {
      if (c.strays[i] != 0.0) strays[study.parameters[i].parameter.name] = c.strays[i];
    }
    corners.push_back({{"corner", c.name},
                       {"spreads", strays},
                       {"eye_mv", eye_json(c.eye)},
                       {"target_met", c.met}});
  }
  Json alternatives = Json::array();
  for (const Alternative& a : study.alternatives) {
    alternatives.push_back({{"name", a.name},
                            {"settings", settings_json(model, a.settings)},
                            {"eye_mv", mv(a.height_v)},
                            {"price_mv", mv(study.nominal_v - a.height_v)},
                            {"least_eye_mv", mv(a.least_v)},
                            {"note", a.note}});
  }
  Json out = {{"parameters", parameters},
              {"corners", corners},
              {"least_eye_mv", mv(study.least_v)},
              {"alternatives", alternatives},
              {"in_words", study.sentences}};
  if (study.draws) {
    const Draws& d = *study.draws;
    out["draws"] = {{"count", d.count},           {"seed", d.seed},
                    {"met_fixed", d.met_fixed},   {"met_readapted", d.met},
                    {"least_eye_mv", mv(d.least_v)}, {"median_eye_mv", mv(d.median_v)}};
  }
  return out;
}

}  // namespace

std::string json_of(const SolutionReport& report) {
  const EyeModel& model = *report.model;
  const Solution& s = report.solution;
  Json out;
  out["format"] = "tapwright.solution/1";
  out["version"] = TAPWRIGHT_VERSION;
  out["name"] = model.link.name;
  out["objective"] = model.link.objective == ObjectiveKind::kWorstCase ? "worst_case" : "at_error_ratio";
  out["error_ratio"] = model.link.target.error_ratio;
  out["settings"] = settings_json(model, s.settings);
  Json writes = Json::array();
  for (const RegisterWrite& w : register_writes(model.link, s.settings).writes) {
    writes.push_back({{"field", w.field}, {"address", w.address}, {"high_bit", w.high_bit},
                      {"low_bit", w.low_bit}, {"value", w.value}});
  }
  if (!writes.empty()) out["registers"] = writes;
  out["score"] = score_json(s.score);
  out["worst_sequence"] = worst_sequence_json(s.score, model.link.signal.levels);
  if (const auto wander = baseline_wander(model, s.settings)) {
    out["baseline_wander_mv"] = wander_json(*wander);
  }
  if (const auto bursts = error_bursts(model, s.settings); bursts && s.settings.dfe_v.size() > 0) {
    out["error_bursts"] = bursts_json(*bursts);
  }
  out["proof"] = proof_json(s.proof);
  Json compared = Json::array();
  for (const Compared& c : s.compared) {
    Json row = {{"method", c.name}};
    if (c.settings) row["settings"] = settings_json(model, *c.settings);
    if (c.score) row["score"] = score_json(*c.score);
    if (!c.note.empty()) row["note"] = c.note;
    compared.push_back(row);
  }
  out["compared"] = compared;
  Json trail = Json::array();
  for (const TrailStep& t : s.trail) {
    trail.push_back({{"stage", t.stage}, {"height_mv", mv(t.height_v)}, {"bound_mv", mv(t.bound_v)},
                     {"settings_scored", t.num_settings}});
  }
  out["trail"] = trail;
  Json sensitivity = Json::array();
  for (const KnobSensitivity& k : report.sensitivity) {
    sensitivity.push_back({{"knob", k.knob.name}, {"at", k.shown}, {"down", change_json(k.down)},
                           {"up", change_json(k.up)}});
  }
  out["sensitivity"] = {{"knobs", sensitivity}};
  if (report.parameters) out["sensitivity"].update(parameters_json(model, *report.parameters));
  out["limited_by"] = report.limited_by;
  out["span_ui"] = model.span_ui;
  out["span_reason"] = model.span_reason;
  Json inputs = Json::array();
  for (const InputFile& input : model.link.inputs) {
    inputs.push_back({{"file", input.path}, {"sha256", input.sha256}});
  }
  out["inputs"] = inputs;
  Json warnings = Json::array();
  for (const auto* notes : {&model.link.warnings, &model.warnings, &s.warnings}) {
    for (const Diagnostic& note : *notes) warnings.push_back(to_string(note));
  }
  out["warnings"] = warnings;
  out["caution"] = caution();
  return out.dump(2, ' ', false, Json::error_handler_t::replace) + "\n";
}

}  // namespace tapwright
