#include "tapwright/eye/sampling.hpp"

#include <algorithm>
#include <cmath>
#include <numbers>
#include <random>

#include "eye/instant.hpp"
#include "tapwright/eye/coded_worst_case.hpp"
#include "tapwright/eye/score.hpp"

namespace tapwright {
namespace {

Eigen::VectorXd settled_at(const EyeModel& model, const CursorMap& map,
                           const Eigen::VectorXd& fir) {
  const DfeLimits& dfe = model.link.device.receiver.dfe;
  const Eigen::VectorXd q = map.cursors * fir;
  Eigen::VectorXd dfe_v(static_cast<Eigen::Index>(dfe.size()));
  for (std::size_t i = 0; i < dfe.size(); ++i) {
    const double wanted_v = map.dfe_rows[i] >= 0 ? q[map.dfe_rows[i]] : 0.0;
    dfe_v[static_cast<Eigen::Index>(i)] = settled_v(dfe[i], wanted_v, q[map.main_index]);
  }
  return dfe_v;
}

double height_of(const PlacedEye& eye, const LineCode& code, const Eigen::VectorXd& fir,
                 const Eigen::VectorXd& dfe_v) {
  return eye.model->link.objective == ObjectiveKind::kWorstCase
             ? coded_worst_case_height_v(eye, code, fir, dfe_v)
             : at_error_ratio_height_v(eye, code, fir, dfe_v);
}

/// The best phase in the worst case under a line code, whose exact worst case costs far more than
/// that of independent symbols. Any sequence of the code bounds what a phase is worth from above:
/// phases are looked at in order of promise, and those that a known sequence rules out are left.
Eigen::Index best_coded_phase(const EyeModel& model, const Settings& settings,
                              const LineCode& code) {
  struct Candidate {
    Eigen::Index phase = 0;
    Eigen::VectorXd residual_v;
    double promise_v = 0.0;  // worst case of independent symbols: no more than the code's
    double clear_v = 0.0;    // height without intersymbol interference
  };
  std::vector<Candidate> candidates;
  Eigen::Index main = 0;
  for (const Eigen::Index phase : candidate_phases(model)) {
    Place place = place_of(settings);
    place.phase_samples = phase;
    const PlacedEye eye = place_eye(model, place);
    const Eigen::VectorXd dfe_v = settled_at(model, eye.phases.front(), settings.fir);
    Instant instant = instant_of(eye, eye.phases.front(), settings.fir, dfe_v);
    const double promise_v = worst_case_height_v(eye, settings.fir.data(), dfe_v.data());
    main = instant.residual.main_index;
    candidates.push_back({phase, std::move(instant.residual.values), promise_v, 0.0});
    Candidate& last = candidates.back();
    last.clear_v = promise_v + 2.0 * (last.residual_v.lpNorm<1>() - std::abs(last.residual_v[main]));
  }
  std::stable_sort(candidates.begin(), candidates.end(), [](const Candidate& a, const Candidate& b) {
    return a.promise_v > b.promise_v;
  });
  CodedIsi isi(code, candidates.front().residual_v.size(), main);
  std::vector<Eigen::VectorXd> sequences;
  const Candidate* best = nullptr;
  double best_v = 0.0;
  for (const Candidate& one : candidates) {
    const auto height_with = [&](const Eigen::VectorXd& signs) {
      return one.clear_v - 2.0 * signs.dot(one.residual_v);
    };
    if (best != nullptr && std::any_of(sequences.begin(), sequences.end(), [&](const auto& signs) {
          return height_with(signs) < best_v;
        })) {
      continue;
    }
    sequences.push_back(isi.cut(one.residual_v).signs);
    const double height_v = height_with(sequences.back());
    // Equal heights go to the earliest phase, in whatever order they were looked at.
    if (best == nullptr || height_v > best_v || (height_v == best_v && one.phase < best->phase)) {
      best = &one;
      best_v = height_v;
    }
  }
  return best->phase;
}

Eigen::Index best_phase(const EyeModel& model, const Settings& settings) {
  const LineCode code = code_of(model);
  if (!code.independent() && model.link.objective == ObjectiveKind::kWorstCase &&
      mask_reach(model) == 0 && model.link.jitter.common_random_ui == 0.0) {
    return best_coded_phase(model, settings, code);
  }
  Eigen::Index best = 0;
  double best_v = -std::numeric_limits<double>::infinity();
  for (const Eigen::Index phase : candidate_phases(model)) {
    Place place = place_of(settings);
    place.phase_samples = phase;
    const PlacedEye eye = place_eye(model, place);
    const Eigen::VectorXd dfe_v = settled_at(model, eye.phases.front(), settings.fir);
    const double height_v = height_of(eye, code, settings.fir, dfe_v);
    if (height_v > best_v) {
      best_v = height_v;
      best = phase;
    }
  }
  return best;
}

/// The pulse after FIR and CTLE at 1 V launch; `origin` is the sample of the unequalised peak.
struct EqualisedPulse {
  PulseResponse pulse;
  Eigen::Index origin = 0;
};

EqualisedPulse equalised(const EyeModel& model, const Settings& settings) {
  const StatePulses& state = model.states[settings.ctle_index];
  FilteredPulse q = apply(model.link.device.transmitter.fir, settings.fir, state.victim);
  return {std::move(q.pulse), q.shift + state.peak_index()};
}

std::optional<Eigen::Index> mueller_muller_phase(const EyeModel& model, const Settings& settings) {
  const EqualisedPulse h = equalised(model, settings);
  const double amplitude_v = model.link.device.transmitter.swings[settings.swing_index].value;
  const Eigen::Index per_ui = h.pulse.samples_per_ui();
  const DfeLimits& dfe = model.link.device.receiver.dfe;
  const DfeTap* first = !dfe.empty() && dfe.front().position == 1 ? &dfe.front() : nullptr;
  const auto balance = [&](Eigen::Index i) {
    const double main = h.pulse.at(i);
    const double post = h.pulse.at(i + per_ui);
    const double taken =
        first != nullptr ? settled_v(*first, amplitude_v * post, amplitude_v * main) / amplitude_v
                         : 0.0;
    return h.pulse.at(i - per_ui) - (post - taken);
  };
  // Early the post-cursor outweighs the pre-cursor (negative), late the other way round: the loop
  // rests where the balance rises through 0. Rounding of the transforms counts as 0.
  const Eigen::Index peak = h.pulse.peak_index();
  const double rounding_v = 1e-9 * h.pulse.at(peak);
  const auto sign_at = [&](Eigen::Index i) {
    const double value = balance(i);
    return value > rounding_v ? 1 : value < -rounding_v ? -1 : 0;
  };
  const auto nearer = [&](Eigen::Index i, Eigen::Index j) {
    return std::abs(balance(i)) <= std::abs(balance(j)) ? i : j;
  };
  if (sign_at(peak) >= 0) {
    for (Eigen::Index i = peak; i > peak - 2 * per_ui; --i) {
      if (sign_at(i) == 0) return i - h.origin;
      if (sign_at(i - 1) < 0) return nearer(i, i - 1) - h.origin;
    }
    return std::nullopt;
  }
  for (Eigen::Index i = peak + 1; i < peak + 2 * per_ui; ++i) {
    if (sign_at(i) >= 0) return nearer(i, i - 1) - h.origin;
  }
  return std::nullopt;
}

/// Half a UI after the median zero crossing, in the UI around the equalised peak.
std::optional<Eigen::Index> edge_phase(const EyeModel& model, const Settings& settings) {
  const EqualisedPulse h = equalised(model, settings);
  const Eigen::Index per_ui = h.pulse.samples_per_ui();
  if (per_ui < kLeastSamplesPerUi) return std::nullopt;
  const Eigen::Index peak = h.pulse.peak_index();
  const Eigen::Index num_pre = model.span_ui[0];
  const Eigen::Index num_post = model.span_ui[1];
  const LineCode code = code_of(model);
  constexpr Eigen::Index kNumSymbols = 2000;
  std::mt19937_64 random(1);
  const Eigen::VectorXd symbols =
      random_stream(code, (kNumSymbols + num_pre + num_post) / code.period() + 1, random);

  // Sample phase by phase: y at (peak + phase) of symbol n is sum_k q(peak + phase + kT) a_{n-k}.
  const Eigen::Index num = symbols.size() - num_pre - num_post;
  Eigen::MatrixXd y(per_ui, num);
  for (Eigen::Index phase = 0; phase < per_ui; ++phase) {
    const Eigen::VectorXd row =
        cursors_at(h.pulse, peak + phase, static_cast<int>(num_pre), static_cast<int>(num_post))
            .reverse();
    for (Eigen::Index n = 0; n < num; ++n) {
      y(phase, n) = row.dot(symbols.segment(n, row.size()));
    }
  }
  const Eigen::Map<const Eigen::VectorXd> wave(y.data(), y.size());
  std::vector<double> crossings;  // in samples after the peak, modulo one UI
  std::complex<double> mean = 0.0;
  for (Eigen::Index i = 0; i + 1 < wave.size(); ++i) {
    if ((wave[i] < 0.0) == (wave[i + 1] < 0.0)) continue;
    const double at = static_cast<double>(i) + wave[i] / (wave[i] - wave[i + 1]);
    crossings.push_back(std::fmod(at, static_cast<double>(per_ui)));
    mean += std::polar(1.0, 2.0 * std::numbers::pi * at / static_cast<double>(per_ui));
  }
  if (crossings.empty()) return std::nullopt;
  // Phases lie on a circle: the median is taken in the UI centred on their mean direction.
  const double ui = static_cast<double>(per_ui);
  const double centre = std::arg(mean) / (2.0 * std::numbers::pi) * ui;
  for (double& at : crossings) at = centre + std::remainder(at - centre, ui);
  const auto middle = crossings.begin() + static_cast<std::ptrdiff_t>(crossings.size() / 2);
  std::nth_element(crossings.begin(), middle, crossings.end());
  const double sampling = std::remainder(*middle + 0.5 * ui, ui);
  return peak + static_cast<Eigen::Index>(std::lround(sampling)) - h.origin;
}

}  // namespace

Eigen::VectorXd settled_dfe(const EyeModel& model, const Settings& settings) {
  const double amplitude_v = model.link.device.transmitter.swings.at(settings.swing_index).value;
  return settled_at(model, cursor_map(model, place_of(settings), 0.0, amplitude_v), settings.fir);
}

Eigen::VectorXd best_dfe(const EyeModel& model, const Settings& settings) {
  const PlacedEye eye = place_eye(model, place_of(settings));
  const DfeLimits& dfe = model.link.device.receiver.dfe;
  Eigen::VectorXd best = settled_at(model, eye.phases.front(), settings.fir);
  const LineCode code = code_of(model);
  if (code.independent() && eye.phases.size() == 1) return best;

  const double main_v =
      eye.phases.front().cursors.row(eye.phases.front().main_index) * settings.fir;
  double best_v = height_of(eye, code, settings.fir, best);
  const auto try_value = [&](Eigen::Index i, double value_v) {
    Eigen::VectorXd trial = best;
    trial[i] = value_v;
    const double height_v = height_of(eye, code, settings.fir, trial);
    if (!(height_v > best_v)) return false;
    best = std::move(trial);
    best_v = height_v;
    return true;
  };
  for (double share = 0.25; share > 1e-3;) {
    bool moved = false;
    for (std::size_t t = 0; t < dfe.size(); ++t) {
      const auto i = static_cast<Eigen::Index>(t);
      const double limit = limit_v(dfe[t], main_v);
      for (const double sign : {-1.0, 1.0}) {
        if (dfe[t].codes.empty()) {
          moved |= try_value(i, std::clamp(best[i] + sign * share * limit, -limit, limit));
          continue;
        }
        // The code `count` places away, fewer as the search narrows.
        const double unit_v = dfe[t].relative ? std::abs(main_v) : 1.0;
        const auto& codes = dfe[t].codes;
        const auto count = std::max(1L, std::lround(share * static_cast<double>(codes.size()) / 2));
        const auto here =
            std::min_element(codes.begin(), codes.end(), [&](const Code& a, const Code& b) {
              return std::abs(a.value * unit_v - best[i]) < std::abs(b.value * unit_v - best[i]);
            });
        const long to = (here - codes.begin()) + (sign < 0 ? -count : count);
        if (to >= 0 && to < static_cast<long>(codes.size())) {
          moved |= try_value(i, codes[static_cast<std::size_t>(to)].value * unit_v);
        }
      }
    }
    if (!moved) share *= 0.5;
  }
  return best;
}

SamplingInstant sampling_instant(const EyeModel& model, const Settings& settings,
                                 SamplingRule rule) {
  std::optional<Eigen::Index> phase;
  if (rule == SamplingRule::kMuellerMuller) phase = mueller_muller_phase(model, settings);
  if (rule == SamplingRule::kEdge) phase = edge_phase(model, settings);
  if (phase) return {*phase, true};
  return {best_phase(model, settings), rule == SamplingRule::kBest};
}

}  // namespace tapwright
