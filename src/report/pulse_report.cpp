#include "tapwright/report/pulse_report.hpp"

#include <algorithm>
#include <cmath>
#include <nlohmann/json.hpp>

#include "report/text_table.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/report/quality_report.hpp"
#include "tapwright/report/solution_report.hpp"

namespace tapwright {
namespace {

/// `pulse` on a time axis that starts `lead` samples before its first sample and has `size` samples.
PulseResponse on_axis(const PulseResponse& pulse, Eigen::Index lead, Eigen::Index size) {
  Eigen::VectorXd samples(size);
  for (Eigen::Index i = 0; i < size; ++i) samples[i] = pulse.at(i - lead);
  return PulseResponse(std::move(samples), pulse.samples_per_ui(), pulse.ui_s());
}

double time_ps(const PulseResponse& pulse, Eigen::Index lead, Eigen::Index i) {
  return s_to_ps(static_cast<double>(i - lead) * pulse.dt_s());
}

}  // namespace

PulseReport pulse_report(const EyeModel& model, const Settings& settings) {
  const StatePulses& state = model.states.at(settings.ctle_index);
  const double swing_v = model.link.device.transmitter.swings.at(settings.swing_index).value;
  const FirLimits& fir = model.link.device.transmitter.fir;
  const PulseResponse plain = scaled(state.victim, swing_v);
  const FilteredPulse filtered = apply(fir, settings.fir, plain);
  const Eigen::Index lead = filtered.shift;
  const auto [pre, post] = model.span_ui;
  PulseReport report{&model,
                     settings,
                     score(model, settings),
                     on_axis(plain, lead, filtered.pulse.size()),
                     filtered.pulse,
                     state.peak_index() + settings.phase_samples + lead,
                     {cursors_at(plain, state.peak_index(), pre, post), pre},
                     {},
                     {}};
  report.after = {cursors_at(filtered.pulse, report.sample_index, pre, post), pre};
  return report;
}

std::string text_of(const PulseReport& report) {
  const EyeModel& model = *report.model;
  const PulseResponse& plain = report.unequalised;
  const Eigen::Index lead = plain.size() - model.states[report.settings.ctle_index].victim.size() > 0
                                ? report.sample_index - report.settings.phase_samples -
                                      model.states[report.settings.ctle_index].peak_index()
                                : 0;
  const double peak_v = plain.samples_v().maxCoeff();
  std::string text = (model.link.name.empty() ? "link" : printable_text(model.link.name, 200)) + "\n\n";
  text += "Pulse\n";
  text += table_text(
      {{"peak before FIR and DFE", fixed(v_to_mv(peak_v), 2) + " mV"},
       {"at", fixed(time_ps(plain, lead, plain.peak_index()), 1) + " ps after launch"},
       {"record", std::to_string(plain.size() / plain.samples_per_ui()) + " UI of " +
                      std::to_string(plain.samples_per_ui()) + " samples"},
       {"sum of |other cursors| before", fixed(v_to_mv(report.before.values.lpNorm<1>() -
                                                        std::abs(report.before.at(0))), 2) + " mV"},
       {"sum of |other cursors| after", fixed(v_to_mv(report.after.values.lpNorm<1>() -
                                                       std::abs(report.after.at(0))), 2) + " mV"}});
  text += "\nCursors, mV (one column before FIR and DFE at the peak, one after the FIR, one after "
          "the DFE)\n";
  std::vector<std::vector<std::string>> rows{{"k", "before", "after FIR", "after DFE"}};
  const double floor_v = 5e-4 * peak_v;
  Eigen::Index quiet = 0;
  for (Eigen::Index k = -report.after.main_index; k < report.after.values.size() - report.after.main_index; ++k) {
    const double largest = std::max({std::abs(report.before.at(k)), std::abs(report.after.at(k)),
                                     std::abs(report.score.residual_v.at(k))});
    if (largest < floor_v || k > 24) {
      ++quiet;
      continue;
    }
    rows.push_back({std::to_string(k), fixed(v_to_mv(report.before.at(k)), 2),
                    fixed(v_to_mv(report.after.at(k)), 2),
                    fixed(v_to_mv(report.score.residual_v.at(k)), 2)});
  }
  text += table_text(rows);
  if (quiet > 0) {
    text += item_text("  ", std::to_string(quiet) + " more cursors, under " +
                                fixed(v_to_mv(floor_v), 2) + " mV or after the 24th, are in --csv and --json");
  }
  text += text_of(report.files, model.link.device.transmitter.swings.at(report.settings.swing_index)
                                    .value);
  for (const auto* notes : {&model.link.warnings, &model.warnings}) {
    for (const Diagnostic& note : *notes) text += item_text("  ", "note: " + note.message);
  }
  return text + "\n" + item_text("", caution());
}

std::string json_of(const PulseReport& report) {
  const auto list = [](const Eigen::VectorXd& volts) {
    nlohmann::ordered_json out = nlohmann::ordered_json::array();
    for (const double v : volts) out.push_back(v_to_mv(v));
    return out;
  };
  nlohmann::ordered_json out;
  out["format"] = "tapwright.pulse/1";
  out["version"] = TAPWRIGHT_VERSION;
  out["name"] = report.model->link.name;
  out["samples_per_ui"] = report.unequalised.samples_per_ui();
  out["ui_ps"] = s_to_ps(report.unequalised.ui_s());
  out["sample_index"] = report.sample_index;
  out["span_ui"] = report.model->span_ui;
  out["cursors_mv"] = {{"first", -report.after.main_index},
                       {"before", list(report.before.values)},
                       {"after_fir", list(report.after.values)}};
  out["unequalised_mv"] = list(report.unequalised.samples_v());
  out["equalised_mv"] = list(report.equalised.samples_v());
  const double swing_v =
      report.model->link.device.transmitter.swings.at(report.settings.swing_index).value;
  out["files"] = nlohmann::ordered_json::parse(json_of(report.files, swing_v));
  return out.dump(2, ' ', false, nlohmann::ordered_json::error_handler_t::replace) + "\n";
}

std::string csv_of(const PulseReport& report) {
  std::string text = "time_ps,unequalised_mv,equalised_mv\n";
  for (Eigen::Index i = 0; i < report.unequalised.size(); ++i) {
    text += exact(time_ps(report.unequalised, 0, i)) + "," +
            exact(v_to_mv(report.unequalised.samples_v()[i])) + "," +
            exact(v_to_mv(report.equalised.samples_v()[i])) + "\n";
  }
  return text;
}

}  // namespace tapwright
