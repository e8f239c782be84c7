#include "tapwright/study/knob_sensitivity.hpp"

#include <algorithm>
#include <cmath>

#include "study/shared_setting.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/eye/sampling.hpp"

namespace tapwright {

Settings readapted(const EyeModel& model, const Settings& settings) {
  Settings out = settings;
  out.phase_samples = sampling_instant(model, out, model.link.sampling).phase_samples;
  out.dfe_v = best_dfe(model, out);
  return out;
}

std::vector<KnobSensitivity> knob_sensitivity(const EyeModel& model, const Settings& settings) {
  const Device& device = model.link.device;
  const double here_v = objective_height_v(model, settings);
  const double main_v = score(model, settings).main_cursor_v;
  std::vector<KnobSensitivity> all;
  for (const KnobReading& reading : readings(device, settings)) {
    KnobSensitivity s{reading.knob, reading.shown, {}, {}};
    for (const int step : {-1, 1}) {
      const auto there = moved(device, settings, reading.knob, step, main_v);
      if (!there || !keeps_input_limit(model, *there)) continue;
      KnobSensitivity::Change change;
      change.fixed_v = objective_height_v(model, *there) - here_v;
      change.readapted_v = reading.knob.kind == Knob::Kind::kDfe
                               ? change.fixed_v
                               : std::max(change.fixed_v, objective_height_v(model, readapted(model, *there)) - here_v);
      (step < 0 ? s.down : s.up) = change;
    }
    all.push_back(std::move(s));
  }
  return all;
}

std::vector<std::string> what_limits(const EyeModel& model, const Settings& settings,
                                     const Score& score) {
  std::vector<std::string> lines;
  // A knob with one value has no say; neither has a zero end of a one-sided tap range.
  for (const KnobReading& r : readings(model.link.device, settings)) {
    if (r.at_least == r.at_most) continue;
    if (r.knob.kind == Knob::Kind::kFir && std::abs(r.value) < 1e-12) continue;
    lines.push_back(r.knob.name + " stands at the " + (r.at_least ? "lower" : "upper") +
                    " end of its range (" + r.shown + ")");
  }
  const FirLimits& fir = model.link.device.transmitter.fir;
  if (fir.taps.size() > 1 && settings.fir.lpNorm<1>() > fir.peak_limit - 1e-9) {
    lines.push_back("the FIR uses its whole peak limit: sum of |taps| = " +
                    significant(fir.peak_limit, 4));
  }
  if (score.peak_input_limit_v && score.peak_input_v > 0.98 * *score.peak_input_limit_v) {
    lines.push_back("the receiver input is at its limit: " +
                    fixed(peak_v_to_mvppd(score.peak_input_v), 0) + " of " +
                    fixed(peak_v_to_mvppd(*score.peak_input_limit_v), 0) + " mVppd");
  }
  return lines;
}

}  // namespace tapwright
