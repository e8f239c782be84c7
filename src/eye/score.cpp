#include "tapwright/eye/score.hpp"

#include <algorithm>
#include <cmath>
#include <functional>

#include "eye/instant.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/eye/coded_worst_case.hpp"
#include "tapwright/eye/sampling.hpp"

namespace tapwright {
namespace {

/// Width of the stretch around offset 0 where `height_at` stays positive, in UI, at most 1; the
/// crossings are placed linearly between samples.
double width_ui(const std::function<double(Eigen::Index)>& height_at, int samples_per_ui) {
  const double centre_v = height_at(0);
  if (!(centre_v > 0.0)) return 0.0;
  double width_samples = 0.0;
  for (const Eigen::Index direction : {-1, 1}) {
    double inside_v = centre_v;
    for (Eigen::Index i = 1; i <= samples_per_ui; ++i) {
      const double next_v = height_at(direction * i);
      if (next_v > 0.0) {
        width_samples += 1.0;
        inside_v = next_v;
      } else {
        width_samples += inside_v / (inside_v - next_v);
        break;
      }
    }
  }
  return std::min(1.0, width_samples / samples_per_ui);
}

double outside_span_of(const EyeModel& model, const LineCode& code, const Settings& settings,
                       double amplitude_v) {
  const StatePulses& state = model.states[settings.ctle_index];
  const Eigen::Index per_ui = state.victim.samples_per_ui();
  const Eigen::Index at = state.peak_index() + settings.phase_samples;
  const int num_pre = std::max<int>(model.span_ui[0], static_cast<int>(at / per_ui) + 1);
  const int num_post =
      std::max<int>(model.span_ui[1], static_cast<int>((state.victim.size() - at) / per_ui) + 1);
  CursorRow row{cursors_at(state.victim, at, num_pre, num_post), num_pre};
  row.values.segment(num_pre - model.span_ui[0], model.span_ui[0] + model.span_ui[1] + 1).setZero();
  const Eigen::VectorXd outside =
      apply(model.link.device.transmitter.fir, settings.fir, row).values;
  return amplitude_v * (code.independent() ? outside.lpNorm<1>() : coded_peak_v(code, outside));
}

EyeHeights heights_of(const PlacedEye& eye, const LineCode& code, const Eigen::VectorXd& fir,
                      const Eigen::VectorXd& dfe_v) {
  return {coded_worst_case_height_v(eye, code, fir, dfe_v),
          at_error_ratio_height_v(eye, code, fir, dfe_v)};
}

std::string in_mv(double volts) { return fixed(v_to_mv(volts), 1) + " mV"; }

std::vector<std::string> what_is_missed(const EyeModel& model, const Score& score) {
  const Target& target = model.link.target;
  const bool worst = model.link.objective == ObjectiveKind::kWorstCase;
  const std::string which = worst ? "in the worst case" : "at the error ratio";
  const std::optional<double> height_v =
      worst ? score.height.worst_case_v : score.height.at_error_ratio_v;
  const std::optional<double> width = worst ? score.eye_width_worst_case_ui : score.eye_width_ui;
  std::vector<std::string> missed;
  if (height_v && !(*height_v > 0.0 && *height_v >= target.eye_height_v)) {
    missed.push_back("eye height " + in_mv(*height_v) + " " + which + ", wanted " +
                     (target.eye_height_v > 0.0 ? in_mv(target.eye_height_v) : "more than 0 mV"));
  }
  if (width && *width < target.eye_width_ui) {
    missed.push_back("eye width " + fixed(*width, 3) + " UI " + which + ", wanted " +
                     fixed(target.eye_width_ui, 3) + " UI");
  }
  if (score.peak_input_limit_v && score.peak_input_v > *score.peak_input_limit_v * (1.0 + 1e-12)) {
    missed.push_back("receiver input " + fixed(peak_v_to_mvppd(score.peak_input_v), 1) +
                     " mVppd, allowed " + fixed(peak_v_to_mvppd(*score.peak_input_limit_v), 1) +
                     " mVppd");
  }
  return missed;
}

}  // namespace

Score score(const EyeModel& model, const Settings& settings) {
  require_fit(model, settings);
  const Link& link = model.link;
  const PlacedEye eye = place_eye(model, place_of(settings));
  const LineCode code = code_of(model);
  const Instant instant = instant_of(eye, eye.phases.front(), settings.fir, settings.dfe_v);
  const CrosstalkPeak crosstalk = crosstalk_peak(eye, settings.fir);
  const Eigen::VectorXd aggressors_v = aggressors_at_error_ratio(eye, settings.fir);

  Score score;
  score.main_cursor_v = instant.main_v();
  score.signal_v = instant.signal_v;
  score.isi_independent_v = instant.isi_v();
  score.isi_v = coded_isi_v(code, instant);
  score.crosstalk_v = crosstalk.worst_v;
  score.aggressors_v = crosstalk.each_v;
  score.dual_dirac_v = link.jitter.dual_dirac_peak_ui * instant.slope.lpNorm<1>();
  score.sigma_receiver_v = instant.sigma_receiver_v;
  score.sigma_transmitter_v = instant.sigma_transmitter_v;
  score.sigma_jitter_v = instant.sigma_jitter_v;
  score.sigma_v = instant.sigma_v();
  score.gaussian_v = eye.quantile * score.sigma_v;
  score.sensitivity_v = link.device.receiver.sensitivity_v;
  score.residual_v = instant.residual;
  CodedIsi worst(code, instant.residual.values.size(), instant.residual.main_index);
  const CodeCut& cut = worst.cut(instant.residual.values);
  score.worst_sequence = cut.sequence;
  score.worst_sequence_main = cut.main_at;
  if (link.signal.line_code.kind == LineCodeKind::k8b10b) {
    score.worst_characters = names_8b10b(cut.sequence);
  }

  score.height = heights_of(eye, code, settings.fir, settings.dfe_v);
  score.settled_dfe_v = settled_dfe(model, settings);
  score.settled = score.settled_dfe_v == settings.dfe_v
                      ? score.height
                      : heights_of(eye, code, settings.fir, score.settled_dfe_v);

  const int per_ui = model.input.samples_per_ui();
  if (per_ui >= kLeastSamplesPerUi) {
    const auto worst_at = [&](Eigen::Index offset) {
      const CursorMap map =
          cursor_map(model, eye.place, static_cast<double>(offset), eye.amplitude_v);
      return worst_case_height_at(eye, code, map, settings.fir, settings.dfe_v) -
             2.0 * crosstalk.worst_v;
    };
    score.eye_width_worst_case_ui = width_ui(worst_at, per_ui);
    const auto ratio_at = [&](Eigen::Index offset) {
      return at_error_ratio(eye, code, offset, settings.fir, settings.dfe_v, aggressors_v).height_v;
    };
    score.eye_width_ui = width_ui(ratio_at, per_ui);
  }
  const AtErrorRatio centre =
      at_error_ratio(eye, code, 0, settings.fir, settings.dfe_v, aggressors_v);
  if (score.signal_v > 0.0 && centre.noise_v > 0.0) {
    score.ratio_db = ratio_to_amplitude_db(score.signal_v / centre.noise_v);
  }
  score.peak_input_v =
      eye.amplitude_v * peak_input_v(link.device.transmitter.fir, settings.fir, model.input);
  score.peak_input_limit_v = link.device.receiver.peak_input_v;
  score.outside_span_v = outside_span_of(model, code, settings, eye.amplitude_v);
  score.missed = what_is_missed(model, score);
  return score;
}

double objective_height_v(const EyeModel& model, const Settings& settings) {
  require_fit(model, settings);
  const PlacedEye eye = place_eye(model, place_of(settings));
  const LineCode code = code_of(model);
  return model.link.objective == ObjectiveKind::kWorstCase
             ? coded_worst_case_height_v(eye, code, settings.fir, settings.dfe_v)
             : at_error_ratio_height_v(eye, code, settings.fir, settings.dfe_v);
}

}  // namespace tapwright
