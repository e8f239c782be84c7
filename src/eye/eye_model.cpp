#include "tapwright/eye/eye_model.hpp"

#include <algorithm>
#include <cmath>

#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

constexpr double kNegligibleTail = 0.002;  // of the peak
constexpr int kLongRecordUi = 128;  // from here on both ends of a record are far from the pulse

struct Span {
  int pre = 0;
  int post = 0;
};

/// UI before and after the peak that any sample of the record lies in.
Span whole_record(const PulseResponse& pulse) {
  const Eigen::Index per_ui = pulse.samples_per_ui();
  const Eigen::Index peak = pulse.peak_index();
  return {static_cast<int>(peak / per_ui) + 2,
          static_cast<int>((pulse.size() - 1 - peak) / per_ui) + 2};
}

/// Sums at UI spacing of |p| beyond n UI, the largest over one UI of instants around the peak.
///
/// Shape: entry n of the result is the sum over k > n (sign = 1) or k < -n (sign = -1).
std::vector<double> remaining_sums(const PulseResponse& pulse, int num_ui, int sign) {
  const Eigen::Index per_ui = pulse.samples_per_ui();
  const Eigen::Index peak = pulse.peak_index();
  std::vector<double> largest(static_cast<std::size_t>(num_ui) + 1, 0.0);
  for (Eigen::Index phase = -per_ui / 2; phase < per_ui - per_ui / 2; ++phase) {
    double sum_v = 0.0;
    for (int n = num_ui; n >= 0; --n) {
      auto& entry = largest[static_cast<std::size_t>(n)];
      entry = std::max(entry, sum_v);
      sum_v += std::abs(pulse.at(peak + phase + sign * n * per_ui));
    }
  }
  return largest;
}

int first_below(const std::vector<double>& sums, double limit_v) {
  const auto it = std::find_if(sums.begin(), sums.end(), [&](double s) { return s < limit_v; });
  return static_cast<int>(it - sums.begin());
}

/// Last UI on one side of the peak in which the RMS over four UI stands out of the noise by a
/// factor of two (four noise-only UI of 32 samples reach 1.4 once in a million).
int last_above_noise(const PulseResponse& pulse, int num_ui, int sign, double noise_v) {
  const Eigen::Index per_ui = pulse.samples_per_ui();
  const Eigen::Index peak = pulse.peak_index();
  for (int n = num_ui; n > 0; --n) {
    double energy_v2 = 0.0;
    for (Eigen::Index i = 0; i < 4 * per_ui; ++i) {
      const double v = pulse.at(peak + sign * (n * per_ui - i));
      energy_v2 += v * v;
    }
    if (energy_v2 > 4.0 * noise_v * noise_v * static_cast<double>(4 * per_ui)) return n;
  }
  return 0;
}

/// RMS of what a long record carries half a record away from its peak, where the response has died
/// away: from second differences over UI, which a smooth tail does not show.
double far_noise_v(const PulseResponse& pulse) {
  const Eigen::Index n = pulse.size();
  const Eigen::Index per_ui = pulse.samples_per_ui();
  if (n < kLongRecordUi * per_ui) return 0.0;
  const auto at = [&](Eigen::Index i) { return pulse.samples_v()[i % n]; };
  const Eigen::Index first = pulse.peak_index() + n / 2;
  double sum_v2 = 0.0;
  for (Eigen::Index i = 0; i < n / 4; ++i) {
    const double v = at(first + i) - 2.0 * at(first + i + per_ui) + at(first + i + 2 * per_ui);
    sum_v2 += v * v / 6.0;
  }
  return std::sqrt(sum_v2 / static_cast<double>(n / 4));
}

struct ChosenSpan {
  Span span;
  std::string reason;
};

ChosenSpan choose_span(const Link& link, const std::vector<StatePulses>& states,
                       const PulseResponse& input) {
  Span span;
  for (const StatePulses& state : states) {
    const Span whole = whole_record(state.victim);
    const double limit_v = kNegligibleTail * state.victim.samples_v().maxCoeff();
    span.pre =
        std::max(span.pre, first_below(remaining_sums(state.victim, whole.pre, -1), limit_v));
    span.post =
        std::max(span.post, first_below(remaining_sums(state.victim, whole.post, 1), limit_v));
  }
  std::string reason = "beyond it the cursors add up to less than 0.2 % of the peak";
  const double noise_v = std::max(link.channel.record_noise_v, far_noise_v(input));
  if (noise_v > 0.0) {
    // A long record is periodic: beyond half of it lies what comes before the signal.
    const int num_ui = static_cast<int>(input.size() / input.samples_per_ui());
    const int most = num_ui >= kLongRecordUi ? num_ui / 2 : num_ui + 1;
    const Span whole = whole_record(input);
    const Span heard = {last_above_noise(input, std::min(whole.pre, most), -1, noise_v),
                        last_above_noise(input, std::min(whole.post, most), 1, noise_v)};
    if (heard.pre < span.pre || heard.post < span.post) {
      reason = "beyond it the record sinks into its own noise of " +
               significant(v_to_mv(noise_v), 2) + " mV RMS per volt launched";
    }
    span = {std::min(span.pre, heard.pre), std::min(span.post, heard.post)};
  }
  for (const DfeTap& tap : link.device.receiver.dfe) span.post = std::max(span.post, tap.position);
  return {span, std::move(reason)};
}

/// An aggressor's record from `pre` UI before its first sample of a tenth of its peak to `post` UI
/// after the last: its instants are its own, so only the length matters.
PulseResponse cropped(const PulseResponse& pulse, const std::array<int, 2>& span_ui) {
  const Eigen::VectorXd magnitude_v = pulse.samples_v().cwiseAbs();
  const double tenth_v = 0.1 * magnitude_v.maxCoeff();
  Eigen::Index first = 0;
  Eigen::Index last = pulse.size() - 1;
  while (first < last && magnitude_v[first] < tenth_v) ++first;
  while (last > first && magnitude_v[last] < tenth_v) --last;
  const Eigen::Index per_ui = pulse.samples_per_ui();
  first = std::max<Eigen::Index>(0, first - span_ui[0] * per_ui);
  last = std::min(pulse.size() - 1, last + span_ui[1] * per_ui);
  return {pulse.samples_v().segment(first, last - first + 1), pulse.samples_per_ui(), pulse.ui_s()};
}

double worst_outside(const PulseResponse& pulse, const std::array<int, 2>& span_ui) {
  const Span whole = whole_record(pulse);
  const auto beyond = [&](int kept_ui, int num_ui, int sign) {
    return kept_ui < num_ui ? remaining_sums(pulse, num_ui, sign)[static_cast<std::size_t>(kept_ui)]
                            : 0.0;
  };
  return beyond(span_ui[0], whole.pre, -1) + beyond(span_ui[1], whole.post, 1);
}

}  // namespace

EyeModel prepare(const Link& link) {
  std::vector<ReceivedSpectrum> aggressors;
  aggressors.reserve(link.crosstalk.size());
  for (const Aggressor& aggressor : link.crosstalk) aggressors.push_back(aggressor.spectrum);
  EyeModel model{link,
                 state_pulses(link.device.receiver, link.channel, aggressors),
                 input_pulse(link.channel),
                 {},
                 0.0,
                 {},
                 {}};
  if (link.signal.span_ui) {
    model.span_ui = *link.signal.span_ui;
    model.span_reason = "as given";
  } else {
    ChosenSpan chosen = choose_span(link, model.states, model.input);
    model.span_ui = {chosen.span.pre, chosen.span.post};
    model.span_reason = std::move(chosen.reason);
  }
  for (StatePulses& state : model.states) {
    for (PulseResponse& aggressor : state.aggressors) aggressor = cropped(aggressor, model.span_ui);
    model.outside_span_v =
        std::max(model.outside_span_v, worst_outside(state.victim, model.span_ui));
  }

  const int per_ui = model.input.samples_per_ui();
  const bool jitter = link.jitter.random_ui > 0.0 || link.jitter.dual_dirac_peak_ui > 0.0 ||
                      link.jitter.common_random_ui > 0.0;
  if (jitter && per_ui < kLeastSamplesPerUi) {
    model.warnings.push_back(warning_at("", 0,
                                        "jitter is left out: found " + std::to_string(per_ui) +
                                            " samples per UI, and a slope needs at least " +
                                            std::to_string(kLeastSamplesPerUi)));
  }
  return model;
}

std::vector<Eigen::Index> candidate_phases(const EyeModel& model) {
  // One UI of phases around the peak, and the same one UI earlier and later.
  const Eigen::Index per_ui = model.input.samples_per_ui();
  std::vector<Eigen::Index> phases;
  phases.reserve(static_cast<std::size_t>(3 * per_ui));
  const Eigen::Index first = -(per_ui / 2) - per_ui;
  for (Eigen::Index i = 0; i < 3 * per_ui; ++i) phases.push_back(first + i);
  return phases;
}

CursorRow victim_row(const EyeModel& model, std::size_t ctle_index, Eigen::Index phase_samples) {
  const StatePulses& state = model.states.at(ctle_index);
  return {cursors_at(state.victim, state.peak_index() + phase_samples, model.span_ui[0],
                     model.span_ui[1]),
          model.span_ui[0]};
}

}  // namespace tapwright
