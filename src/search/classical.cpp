#include "tapwright/search/classical.hpp"

#include <Eigen/Cholesky>
#include <Eigen/LU>
#include <algorithm>
#include <cmath>
#include <functional>
#include <limits>
#include <string>
#include <utility>
#include <variant>

#include "tapwright/eye/placed_eye.hpp"
#include "tapwright/eye/sampling.hpp"

namespace tapwright {
namespace {

bool contains(const std::vector<int>& list, int value) {
  return std::find(list.begin(), list.end(), value) != list.end();
}

/// Row k: what each tap adds to cursor k.
Eigen::RowVectorXd taps_to_cursor(const std::vector<int>& positions, const CursorRow& p, int k) {
  Eigen::RowVectorXd row(static_cast<Eigen::Index>(positions.size()));
  for (std::size_t i = 0; i < positions.size(); ++i) {
    row[static_cast<Eigen::Index>(i)] = p.at(k - positions[i]);
  }
  return row;
}

int first_cursor(const std::vector<int>& positions, const CursorRow& p) {
  return static_cast<int>(-p.main_index) + std::min(0, positions.front());
}

int last_cursor(const std::vector<int>& positions, const CursorRow& p) {
  return static_cast<int>(p.values.size() - 1 - p.main_index) + std::max(0, positions.back());
}

std::vector<int> positions_of(const FirLimits& limits) {
  std::vector<int> positions;
  for (const FirTap& tap : limits.taps) positions.push_back(tap.position);
  return positions;
}

std::vector<int> positions_of(const DfeLimits& limits) {
  std::vector<int> positions;
  for (const DfeTap& tap : limits) positions.push_back(tap.position);
  return positions;
}

}  // namespace

std::optional<Eigen::VectorXd> zero_forcing_taps(const std::vector<int>& positions,
                                                 const std::vector<int>& dfe_positions,
                                                 const CursorRow& p) {
  std::vector<int> nulled;
  int later = std::max(1, positions.back());
  for (const int position : positions) {
    if (position == 0) continue;
    int k = position;
    while (contains(dfe_positions, k) || contains(nulled, k)) k = ++later;
    nulled.push_back(k);
  }
  const auto n = static_cast<Eigen::Index>(positions.size());
  Eigen::MatrixXd equations(n, n);
  Eigen::VectorXd wanted = Eigen::VectorXd::Zero(n);
  wanted[0] = 1.0;
  equations.row(0) = taps_to_cursor(positions, p, 0);
  for (std::size_t i = 0; i < nulled.size(); ++i) {
    equations.row(static_cast<Eigen::Index>(i) + 1) = taps_to_cursor(positions, p, nulled[i]);
  }
  Eigen::FullPivLU<Eigen::MatrixXd> lu(equations);
  lu.setThreshold(1e-12);
  if (!lu.isInvertible()) return std::nullopt;
  return Eigen::VectorXd(lu.solve(wanted));
}

LeastSquares least_squares_taps(const std::vector<int>& positions,
                                const std::vector<int>& dfe_positions, const CursorRow& p,
                                double symbol_variance, double noise_v, double peak_limit,
                                const Eigen::MatrixXd& crosstalk) {
  const auto n = static_cast<Eigen::Index>(positions.size());
  Eigen::MatrixXd squares = Eigen::MatrixXd::Zero(n, n);
  for (int k = first_cursor(positions, p); k <= last_cursor(positions, p); ++k) {
    if (k != 0 && contains(dfe_positions, k)) continue;
    const Eigen::RowVectorXd row = taps_to_cursor(positions, p, k);
    squares.noalias() += row.transpose() * row;
  }
  squares *= symbol_variance;
  if (crosstalk.size() > 0) squares += crosstalk;
  const Eigen::VectorXd wanted =
      symbol_variance * taps_to_cursor(positions, p, 0).transpose();
  const double noise = noise_v / peak_limit;
  const double noise2 = noise * noise;
  const auto value = [&](const Eigen::VectorXd& u) {
    const double sum = u.lpNorm<1>();
    return symbol_variance + u.dot(squares * u) - 2.0 * wanted.dot(u) + noise2 * sum * sum;
  };
  // With the signs known the problem is linear; the signs of the others must not pull them off zero.
  const auto on_support = [&](const Eigen::VectorXd& signs) {
    std::vector<Eigen::Index> support;
    for (Eigen::Index i = 0; i < n; ++i) {
      if (signs[i] != 0.0) support.push_back(i);
    }
    const auto m = static_cast<Eigen::Index>(support.size());
    Eigen::MatrixXd a(m, m);
    Eigen::VectorXd b(m);
    for (Eigen::Index i = 0; i < m; ++i) {
      const Eigen::Index si = support[static_cast<std::size_t>(i)];
      b[i] = wanted[si];
      for (Eigen::Index j = 0; j < m; ++j) {
        const Eigen::Index sj = support[static_cast<std::size_t>(j)];
        a(i, j) = squares(si, sj) + noise2 * signs[si] * signs[sj];
      }
    }
    const Eigen::VectorXd solution = a.ldlt().solve(b);
    Eigen::VectorXd u = Eigen::VectorXd::Zero(n);
    for (Eigen::Index i = 0; i < m; ++i) u[support[static_cast<std::size_t>(i)]] = solution[i];
    return u;
  };

  // Coordinate descent on u+ and u-, both >= 0: smooth, so it can't stick at a kink of |u|.
  Eigen::VectorXd plus = Eigen::VectorXd::Zero(n);
  Eigen::VectorXd minus = Eigen::VectorXd::Zero(n);
  constexpr int kMaxSweeps = 2000;
  for (int sweep = 0; sweep < kMaxSweeps; ++sweep) {
    double moved = 0.0;
    for (Eigen::Index i = 0; i < n; ++i) {
      for (const double sign : {1.0, -1.0}) {
        const Eigen::VectorXd u = plus - minus;
        const double total = plus.sum() + minus.sum();
        const double slope = sign * (squares.row(i).dot(u) - wanted[i]) + noise2 * total;
        const double curvature = squares(i, i) + noise2;
        double& x = sign > 0.0 ? plus[i] : minus[i];
        const double to = curvature > 0.0 ? std::max(0.0, x - slope / curvature) : x;
        moved = std::max(moved, std::abs(to - x));
        x = to;
      }
    }
    if (moved < 1e-12) break;
  }
  Eigen::VectorXd u = plus - minus;
  const Eigen::VectorXd polished = on_support(u.cwiseSign());
  if (polished.allFinite() && value(polished) <= value(u)) u = polished;
  return {u, value(u)};
}

std::optional<Eigen::VectorXd> to_codes(const FirLimits& limits, Eigen::VectorXd taps) {
  const double sum = taps.lpNorm<1>();
  if (!(sum > 0.0) || !std::isfinite(sum)) return std::nullopt;
  taps *= limits.peak_limit / sum;
  return nearest_codes(limits, std::move(taps));
}

std::optional<Eigen::VectorXd> nearest_codes(const FirLimits& limits, Eigen::VectorXd taps) {
  const auto n = static_cast<Eigen::Index>(limits.taps.size());
  std::vector<int> code(limits.taps.size(), -1);
  const Eigen::VectorXd wanted = taps;
  for (Eigen::Index i = 0; i < n; ++i) {
    const auto index = static_cast<std::size_t>(i);
    const FirTap& tap = limits.taps[index];
    if (tap.is_remainder) continue;
    const bool main = tap.position == 0;
    const double least = main && limits.min_main ? std::max(tap.min, *limits.min_main) : tap.min;
    taps[i] = std::clamp(taps[i], least, std::max(least, tap.max));
    double nearest = std::numeric_limits<double>::infinity();
    for (std::size_t c = 0; c < tap.codes.size(); ++c) {
      const double distance = std::abs(tap.codes[c].value - taps[i]);
      if (tap.codes[c].value >= least - 1e-9 && distance < nearest) {
        nearest = distance;
        code[index] = static_cast<int>(c);
      }
    }
    if (code[index] >= 0) taps[i] = tap.codes[static_cast<std::size_t>(code[index])].value;
  }
  taps = with_remainder(limits, taps);
  // Rounding outward may break the peak limit: step inward where it went out farthest.
  for (int tries = 0; tries < 64 && !keeps_limits(limits, taps); ++tries) {
    Eigen::Index worst = -1;
    double most = -std::numeric_limits<double>::infinity();
    int to = 0;
    for (Eigen::Index i = 0; i < n; ++i) {
      const auto index = static_cast<std::size_t>(i);
      if (code[index] < 0) continue;
      const int inward = taps[i] > 0.0 ? code[index] - 1 : code[index] + 1;
      const double excess = std::abs(taps[i]) - std::abs(wanted[i]);
      if (inward < 0 || inward >= static_cast<int>(limits.taps[index].codes.size())) continue;
      const double smaller = limits.taps[index].codes[static_cast<std::size_t>(inward)].value;
      if (excess > most && std::abs(smaller) < std::abs(taps[i])) {
        most = excess;
        worst = i;
        to = inward;
      }
    }
    if (worst < 0) break;
    const auto index = static_cast<std::size_t>(worst);
    code[index] = to;
    taps[worst] = limits.taps[index].codes[static_cast<std::size_t>(to)].value;
    taps = with_remainder(limits, taps);
  }
  if (!keeps_limits(limits, taps)) return std::nullopt;
  return taps;
}

namespace {

/// The largest swing that these taps may have at the receiver's input; the least if none may.
std::size_t largest_swing(const EyeModel& model, const Eigen::VectorXd& fir) {
  const Device& device = model.link.device;
  std::size_t index = device.transmitter.swings.size() - 1;
  if (!device.receiver.peak_input_v) return index;
  const double peak = peak_input_v(device.transmitter.fir, fir, model.input);
  while (index > 0 && device.transmitter.swings[index].value * peak > *device.receiver.peak_input_v) {
    --index;
  }
  return index;
}

/// Mean over phases of each aggressor's variance, as a quadratic form of the victim's taps, at 1 V
/// launch. Aggressors with taps of their own are noise that the victim's taps don't change.
struct CrosstalkPower {
  Eigen::MatrixXd by_taps;
  double fixed_v2 = 0.0;
};

CrosstalkPower crosstalk_power(const EyeModel& model, std::size_t ctle_index, double amplitude_v) {
  const FirLimits& limits = model.link.device.transmitter.fir;
  const auto n = static_cast<Eigen::Index>(limits.taps.size());
  CrosstalkPower power;
  power.by_taps = Eigen::MatrixXd::Zero(n, n);
  const double variance = symbol_variance(model.link.signal.levels);
  for (std::size_t a = 0; a < model.link.crosstalk.size(); ++a) {
    const Aggressor& aggressor = model.link.crosstalk[a];
    const PulseResponse& pulse = model.states[ctle_index].aggressors[a];
    const double ratio = aggressor.amplitude_v.value_or(amplitude_v) / amplitude_v;
    const double scale = variance * ratio * ratio / pulse.samples_per_ui();
    Eigen::MatrixXd form(n, n);
    for (Eigen::Index i = 0; i < n; ++i) {
      for (Eigen::Index j = 0; j <= i; ++j) {
        const Eigen::Index shift = static_cast<Eigen::Index>(
            std::lround((limits.taps[static_cast<std::size_t>(i)].position -
                         limits.taps[static_cast<std::size_t>(j)].position) *
                        aggressor.ui_ratio * pulse.samples_per_ui()));
        double sum = 0.0;
        for (Eigen::Index t = 0; t < pulse.size(); ++t) sum += pulse.at(t) * pulse.at(t - shift);
        form(i, j) = form(j, i) = scale * sum;
      }
    }
    if (aggressor.fixed_fir) {
      power.fixed_v2 += aggressor.fixed_fir->dot(form * *aggressor.fixed_fir);
    } else {
      power.by_taps += form;
    }
  }
  return power;
}

Compared scored(const EyeModel& model, std::string name, const Eigen::VectorXd& fir,
                std::size_t ctle_index, std::string note) {
  Settings settings;
  settings.fir = fir;
  settings.ctle_index = ctle_index;
  settings.swing_index = largest_swing(model, fir);
  settings.phase_samples = sampling_instant(model, settings, model.link.sampling).phase_samples;
  settings.dfe_v = best_dfe(model, settings);
  Score worth = score(model, settings);
  return {std::move(name), std::move(settings), std::move(worth), std::move(note)};
}

Compared none(std::string name, std::string why) {
  return {std::move(name), std::nullopt, std::nullopt, std::move(why)};
}

/// The state that changes the spectrum least: the largest DC gain among the reference forms.
std::size_t flattest(const EyeModel& model) {
  std::size_t best = 0;
  double best_db = -std::numeric_limits<double>::infinity();
  const std::vector<CtleState>& states = model.link.device.receiver.ctle;
  for (std::size_t i = 0; i < states.size(); ++i) {
    const auto* reference = std::get_if<CtleReference>(&states[i].response);
    if (reference != nullptr && reference->dc_gain_db > best_db) {
      best_db = reference->dc_gain_db;
      best = i;
    }
  }
  return best;
}

Compared no_equalization(const EyeModel& model) {
  const char* name = "no equalization";
  const FirLimits& limits = model.link.device.transmitter.fir;
  Eigen::VectorXd flat = Eigen::VectorXd::Zero(static_cast<Eigen::Index>(limits.taps.size()));
  flat[static_cast<Eigen::Index>(limits.main_index())] = 1.0;
  const auto fir = to_codes(limits, flat);
  if (!fir) return none(name, "the FIR's limits leave no flat setting");
  Settings settings;
  settings.fir = *fir;
  settings.ctle_index = flattest(model);
  settings.swing_index = largest_swing(model, *fir);
  settings.phase_samples = sampling_instant(model, settings, model.link.sampling).phase_samples;
  const DfeLimits& dfe = model.link.device.receiver.dfe;
  settings.dfe_v.resize(static_cast<Eigen::Index>(dfe.size()));
  for (std::size_t i = 0; i < dfe.size(); ++i) {
    settings.dfe_v[static_cast<Eigen::Index>(i)] = settled_v(dfe[i], 0.0, 1.0);
  }
  Score worth = score(model, settings);
  return {name, std::move(settings), std::move(worth),
          "FIR flat, CTLE as flat as it goes, DFE at zero"};
}

/// Taps of one state and instant, and how good the method itself finds them (smaller is better).
struct Candidate {
  Eigen::VectorXd taps;
  double measure = std::numeric_limits<double>::infinity();
  std::size_t ctle_index = 0;
};

Compared best_of(const EyeModel& model, const char* name, const char* note,
                 const std::function<Candidate(std::size_t, const CursorRow&)>& method) {
  const FirLimits& limits = model.link.device.transmitter.fir;
  const Eigen::Index half_ui = model.input.samples_per_ui() / 2;
  Candidate best;
  for (std::size_t c = 0; c < model.states.size(); ++c) {
    for (Eigen::Index phase = -half_ui; phase <= half_ui; ++phase) {
      const CursorRow row = victim_row(model, c, phase);
      Candidate candidate = method(c, row);
      if (candidate.measure < best.measure) {
        best = std::move(candidate);
        best.ctle_index = c;
      }
    }
  }
  if (!std::isfinite(best.measure)) return none(name, "its equations have no solution here");
  const auto fir = to_codes(limits, best.taps);
  if (!fir) return none(name, "no codes near its taps keep the FIR's limits");
  return scored(model, name, *fir, best.ctle_index, note);
}

}  // namespace

std::vector<Compared> classical_methods(const EyeModel& model) {
  const Device& device = model.link.device;
  const std::vector<int> positions = positions_of(device.transmitter.fir);
  const std::vector<int> dfe_positions = positions_of(device.receiver.dfe);
  const double peak_limit = device.transmitter.fir.peak_limit;
  const double amplitude_v = device.transmitter.swings.back().value;
  const double variance = symbol_variance(model.link.signal.levels);

  const auto zero_forcing = [&](std::size_t, const CursorRow& row) {
    Candidate candidate;
    const auto taps = zero_forcing_taps(positions, dfe_positions, row);
    if (!taps) return candidate;
    // Its own measure: what is left beside q_0 = 1, and what the peak limit makes of it.
    double left = 0.0;
    for (int k = first_cursor(positions, row); k <= last_cursor(positions, row); ++k) {
      if (k != 0 && !contains(dfe_positions, k)) {
        left += std::abs(taps_to_cursor(positions, row, k).dot(*taps));
      }
    }
    const double main = peak_limit / taps->lpNorm<1>();
    candidate.taps = *taps;
    candidate.measure = -main * (1.0 - left);
    return candidate;
  };
  std::vector<Eigen::MatrixXd> crosstalk;
  std::vector<double> noise_v;
  for (std::size_t c = 0; c < model.states.size(); ++c) {
    const CrosstalkPower power = crosstalk_power(model, c, amplitude_v);
    crosstalk.push_back(power.by_taps);
    const double receiver_v = model.states[c].noise_v / amplitude_v;
    noise_v.push_back(std::sqrt(receiver_v * receiver_v + power.fixed_v2));
  }
  const auto least_squares = [&](std::size_t c, const CursorRow& row) {
    Candidate candidate;
    LeastSquares found = least_squares_taps(positions, dfe_positions, row, variance, noise_v[c],
                                            peak_limit, crosstalk[c]);
    if (found.taps.allFinite() && found.taps.lpNorm<1>() > 0.0) {
      candidate.taps = std::move(found.taps);
      candidate.measure = found.mean_square;
    }
    return candidate;
  };
  return {no_equalization(model),
          best_of(model, "zero forcing", "scaled to the peak limit, clipped and rounded to codes",
                  zero_forcing),
          best_of(model, "MMSE", "scaled to the peak limit, clipped and rounded to codes",
                  least_squares)};
}

}  // namespace tapwright
