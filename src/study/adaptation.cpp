#include "tapwright/study/adaptation.hpp"

#include <algorithm>
#include <cmath>

#include "tapwright/eye/sampling.hpp"
#include "tapwright/eye/score.hpp"
#include "tapwright/search/classical.hpp"

namespace tapwright {
namespace {

/// Cursors after the FIR at one instant, in volts at the swing.
CursorRow filtered_row(const EyeModel& model, const Settings& s) {
  const double amplitude_v = model.link.device.transmitter.swings[s.swing_index].value;
  CursorRow row = victim_row(model, s.ctle_index, s.phase_samples);
  row.values *= amplitude_v;
  return apply(model.link.device.transmitter.fir, s.fir, row);
}

double clipped_v(const DfeTap& tap, double wanted_v, double main_v) {
  const double limit = limit_v(tap, main_v);
  return std::clamp(wanted_v, -limit, limit);
}

Eigen::VectorXd clipped_dfe(const EyeModel& model, const Settings& s) {
  const CursorRow q = filtered_row(model, s);
  const DfeLimits& dfe = model.link.device.receiver.dfe;
  Eigen::VectorXd d(static_cast<Eigen::Index>(dfe.size()));
  for (std::size_t i = 0; i < dfe.size(); ++i) {
    d[static_cast<Eigen::Index>(i)] = clipped_v(dfe[i], q.at(dfe[i].position), q.at(0));
  }
  return d;
}

double ratio_of(const EyeModel& model, const Settings& s) {
  const CursorRow q = filtered_row(model, s);
  const double main_v = q.at(0);
  if (!(main_v > 0.0)) return 0.0;
  double left = q.values.squaredNorm() - main_v * main_v;
  for (const DfeTap& tap : model.link.device.receiver.dfe) {
    const double qk = q.at(tap.position);
    const double r = qk - clipped_v(tap, qk, main_v);
    left += r * r - qk * qk;
  }
  const double levels = model.link.signal.levels;
  const double variance = (levels * levels - 1.0) / (3.0 * (levels - 1.0) * (levels - 1.0));
  const double noise = model.states[s.ctle_index].noise_v;
  return variance * main_v * main_v / (variance * left + noise * noise + 1e-18);
}

bool inside(const FirLimits& limits, const Eigen::VectorXd& taps) {
  for (std::size_t i = 0; i < limits.taps.size(); ++i) {
    const FirTap& tap = limits.taps[i];
    const double c = taps[static_cast<Eigen::Index>(i)];
    const double low = tap.codes.empty() ? tap.min : tap.codes.front().value;
    const double high = tap.codes.empty() ? tap.max : tap.codes.back().value;
    if (!tap.is_remainder && (c < low - 1e-12 || c > high + 1e-12)) return false;
    if (tap.is_remainder && (c < tap.min - 1e-12 || c > tap.max + 1e-12)) return false;
    if (tap.position == 0 && limits.min_main && c < *limits.min_main - 1e-12) return false;
  }
  return taps.lpNorm<1>() <= limits.peak_limit + 1e-12;
}

/// The main tap takes what the others leave of the peak limit, inside its own range.
Eigen::VectorXd full_scale(const FirLimits& limits, Eigen::VectorXd taps) {
  const auto main = static_cast<Eigen::Index>(limits.main_index());
  const FirTap& tap = limits.taps[limits.main_index()];
  taps[main] = 0.0;
  const double rest = limits.peak_limit - taps.lpNorm<1>();
  const double high = tap.is_remainder || tap.codes.empty() ? tap.max : tap.codes.back().value;
  taps[main] = std::min(rest, high);
  return taps;
}

/// Taps that maximise the ratio within the limits: pattern search on the taps beside the main one,
/// steps halved down to 1e-5. The ratio has one maximum over a few taps in practice, and the search
/// starts from the clipped unlimited optimum.
Settings joint_optimum(const EyeModel& model, Settings s) {
  const FirLimits& limits = model.link.device.transmitter.fir;
  const auto main = static_cast<Eigen::Index>(limits.main_index());
  double best = ratio_of(model, s);
  for (double step = 0.064; step > 1e-5; step /= 2.0) {
    for (bool moved_any = true; moved_any;) {
      moved_any = false;
      for (Eigen::Index i = 0; i < s.fir.size(); ++i) {
        if (i == main) continue;
        for (const double direction : {-1.0, 1.0}) {
          Settings there = s;
          there.fir[i] += direction * step;
          there.fir = full_scale(limits, there.fir);
          if (!inside(limits, there.fir)) continue;
          const double ratio = ratio_of(model, there);
          if (ratio > best * (1.0 + 1e-12)) {
            best = ratio;
            s = there;
            moved_any = true;
          }
        }
      }
    }
  }
  return s;
}

/// The least-square taps without limits, each clipped to its own range.
Eigen::VectorXd clipped_taps(const EyeModel& model, const Settings& at) {
  const FirLimits& limits = model.link.device.transmitter.fir;
  std::vector<int> positions;
  std::vector<int> dfe_positions;
  for (const FirTap& tap : limits.taps) positions.push_back(tap.position);
  for (const DfeTap& tap : model.link.device.receiver.dfe) dfe_positions.push_back(tap.position);
  CursorRow p = victim_row(model, at.ctle_index, at.phase_samples);
  p.values *= model.link.device.transmitter.swings[at.swing_index].value;
  const double levels = model.link.signal.levels;
  const double variance = (levels * levels - 1.0) / (3.0 * (levels - 1.0) * (levels - 1.0));
  Eigen::VectorXd taps = least_squares_taps(positions, dfe_positions, p, variance,
                                            model.states[at.ctle_index].noise_v, limits.peak_limit)
                             .taps;
  const double sum = taps.lpNorm<1>();
  const auto main = static_cast<Eigen::Index>(limits.main_index());
  if (!(sum > 0.0) || !(taps[main] > 0.0)) return full_scale(limits, Eigen::VectorXd::Zero(taps.size()));
  taps *= limits.peak_limit / sum;
  for (std::size_t i = 0; i < limits.taps.size(); ++i) {
    const FirTap& tap = limits.taps[i];
    const auto k = static_cast<Eigen::Index>(i);
    if (k == main) continue;
    const double low = tap.codes.empty() ? tap.min : tap.codes.front().value;
    const double high = tap.codes.empty() ? tap.max : tap.codes.back().value;
    taps[k] = std::clamp(taps[k], low, high);
  }
  taps = full_scale(limits, taps);
  // Ranges that together leave too little for the main tap: the transmitter shrinks the others.
  for (int i = 0; i < 40 && !inside(limits, taps); ++i) {
    taps *= 0.95;
    taps = full_scale(limits, taps);
  }
  return taps;
}

}  // namespace

double mean_square_ratio(const EyeModel& model, const Settings& settings) { return ratio_of(model, settings); }

Adaptation adaptation(const EyeModel& model, std::size_t swing_index, std::size_t ctle_index) {
  const FirLimits& limits = model.link.device.transmitter.fir;
  const SamplingRule clock =
      model.link.sampling == SamplingRule::kBest ? SamplingRule::kMuellerMuller : model.link.sampling;
  Settings start;
  start.swing_index = swing_index;
  start.ctle_index = ctle_index;
  start.fir = full_scale(limits, Eigen::VectorXd::Zero(static_cast<Eigen::Index>(limits.taps.size())));
  start.dfe_v = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(model.link.device.receiver.dfe.size()));

  // Taps follow the instant and the instant the taps: iterated until the instant stays, at most
  // so often that a two-cycle is left too.
  constexpr int kMostRounds = 12;
  const auto settle = [&](SamplingRule rule, bool joint) {
    Settings s = start;
    std::vector<Eigen::Index> seen;
    for (int round = 0; round < kMostRounds; ++round) {
      s.phase_samples = sampling_instant(model, s, rule).phase_samples;
      if (std::find(seen.begin(), seen.end(), s.phase_samples) != seen.end()) break;
      seen.push_back(s.phase_samples);
      s.fir = clipped_taps(model, s);
      if (joint) s = joint_optimum(model, s);
    }
    s.dfe_v = clipped_dfe(model, s);
    return s;
  };
  Adaptation out;
  out.joint = settle(SamplingRule::kBest, true);
  out.at_clock = settle(clock, true);
  out.clipped = settle(clock, false);
  out.settled = out.clipped;
  if (const auto codes = to_codes(limits, out.clipped.fir)) out.settled.fir = *codes;
  out.settled.dfe_v = settled_dfe(model, out.settled);
  return out;
}

}  // namespace tapwright
