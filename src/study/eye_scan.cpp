#include "tapwright/study/eye_scan.hpp"

#include <Eigen/Cholesky>
#include <nlopt.hpp>

#include <algorithm>
#include <cmath>
#include <map>
#include <stdexcept>

#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/eye/distribution.hpp"
#include "tapwright/eye/placed_eye.hpp"
#include "tapwright/link/read_back.hpp"

namespace tapwright {
namespace {

double symbol_variance_of(int levels) {
  const double n = levels;
  return (n * n - 1.0) / (3.0 * (n - 1.0) * (n - 1.0));
}

/// All that does not depend on noise and jitter at one phase.
struct PhaseState {
  Disturbance disturbance;      ///< sigma_v is set for each question
  double signal_v = 0.0;        ///< half the inner eye
  double transmitter_v2 = 0.0;  ///< variance of the transmitter's noise
  double slope_square = 0.0;    ///< sigma_X^2 sum h_J^2
};

PhaseState phase_state(const EyeModel& model, const Settings& settings, Eigen::Index offset) {
  // The DFE was set at the settings' instant and stays; place_eye counts phases from the peak.
  const PlacedEye eye = place_eye(model, {settings.swing_index, settings.ctle_index, settings.phase_samples + offset});
  const CursorMap& map = eye.phases.front();
  const Signal& signal = model.link.signal;
  Eigen::VectorXd r = map.cursors * settings.fir;
  PhaseState state;
  std::vector<double> rest;
  for (std::size_t i = 0; i < map.dfe_rows.size(); ++i) {
    const double d = settings.dfe_v[static_cast<Eigen::Index>(i)];
    if (map.dfe_rows[i] >= 0) r[map.dfe_rows[i]] -= d;
    else rest.push_back(d);
  }
  for (Eigen::Index k = 0; k < r.size(); ++k) {
    if (k != map.main_index) rest.push_back(r[k]);
  }
  for (std::size_t a = 0; a < model.link.crosstalk.size(); ++a) {
    const Eigen::VectorXd x = aggressor_cursors(eye, a, settings.fir, AggressorPhase::kLargestVariance).values_v;
    rest.insert(rest.end(), x.begin(), x.end());
  }
  const double main_v = r[map.main_index];
  state.signal_v = main_v * (signal.levels == 2 ? 1.0 : signal.level_mismatch) / (signal.levels - 1.0);
  state.disturbance.symbols_v = Eigen::Map<const Eigen::VectorXd>(rest.data(), static_cast<Eigen::Index>(rest.size()));
  state.disturbance.levels = signal.levels;
  state.transmitter_v2 = std::pow(eye.transmitter_noise_ratio * main_v, 2);
  if (map.jitter.size() > 0) {
    const Eigen::VectorXd slope = map.jitter * settings.fir;
    state.slope_square = symbol_variance_of(signal.levels) * slope.squaredNorm();
    state.disturbance.binary_v = model.link.jitter.dual_dirac_peak_ui * slope;
  } else if (model.input.samples_per_ui() >= kLeastSamplesPerUi) {
    // The link has no jitter of its own, so place_eye left the slopes out.
    const auto neighbour = [&](Eigen::Index step) -> Eigen::VectorXd {
      return place_eye(model, {settings.swing_index, settings.ctle_index, settings.phase_samples + offset + step})
                 .phases.front().cursors * settings.fir;
    };
    const Eigen::VectorXd slope = (neighbour(1) - neighbour(-1)) * (model.input.samples_per_ui() / 2.0);
    state.slope_square = symbol_variance_of(signal.levels) * slope.squaredNorm();
  }
  return state;
}

/// Mean over both symbols next to the threshold of deciding wrongly.
double error_ratio_at(const PhaseState& state, double noise_v, double random_ui, double offset_v) {
  Disturbance d = state.disturbance;
  d.sigma_v = std::sqrt(noise_v * noise_v + state.transmitter_v2 + random_ui * random_ui * state.slope_square);
  return 0.5 * (exceedance(d, state.signal_v - offset_v) + exceedance(d, state.signal_v + offset_v));
}

Eigen::Index samples_of(const EyeModel& model, double phase_ui) {
  return std::lround(phase_ui * model.input.samples_per_ui());
}

}  // namespace

double predicted_error_ratio(const EyeModel& model, const Settings& settings, double offset_v, double phase_ui) {
  const PhaseState state = phase_state(model, settings, samples_of(model, phase_ui));
  return error_ratio_at(state, model.states.at(settings.ctle_index).noise_v, model.link.jitter.random_ui, offset_v);
}

Result<std::vector<EyeScan>> parse_eye_scans(std::string_view text, const std::string& file_name) {
  const auto table = parse_text_table(text, file_name);
  if (!table) return {std::nullopt, table.notes};
  static const std::vector<std::string> kKnown = {"lane", "offset_mv", "phase_ui", "errors", "bits", "error_ratio"};
  std::vector<Diagnostic> notes;
  const auto problem = [&](int line, const std::string& message) {
    if (notes.size() < 20) notes.push_back(error_at(file_name, line, message));
  };
  const auto& columns = table.value->columns;
  const auto has = [&](const char* name) { return std::find(columns.begin(), columns.end(), name) != columns.end(); };
  for (const std::string& column : columns) {
    if (std::find(kKnown.begin(), kKnown.end(), column) != kKnown.end()) continue;
    const auto near = nearest_word(column, kKnown);
    problem(1, "column " + shown_text(column) + " is not known" + (near ? "; did you mean " + shown_text(*near) + "?" : ""));
  }
  if (!has("bits")) problem(1, "column \"bits\" is missing");
  if (has("errors") == has("error_ratio")) problem(1, "wanted one of the columns \"errors\" and \"error_ratio\"");
  if (!notes.empty()) return {std::nullopt, std::move(notes)};
  std::vector<EyeScan> scans;
  for (const TextTable::Row& row : table.value->rows) {
    ScanPoint point;
    std::string lane;
    double ratio = -1.0;
    for (std::size_t i = 0; i < columns.size(); ++i) {
      if (columns[i] == "lane") {
        lane = row.cells[i];
        continue;
      }
      const auto value = parse_number(row.cells[i]);
      if (!value) {
        problem(row.line, "column " + columns[i] + ": found " + shown_text(row.cells[i]) + ", wanted a number");
        continue;
      }
      if (columns[i] == "offset_mv") point.offset_v = mv_to_v(*value);
      if (columns[i] == "phase_ui") point.phase_ui = *value;
      if (columns[i] == "errors") point.errors = *value;
      if (columns[i] == "bits") point.bits = *value;
      if (columns[i] == "error_ratio") ratio = *value;
    }
    if (ratio >= 0.0) point.errors = ratio * point.bits;
    if (!(point.bits > 0.0)) problem(row.line, "column bits: wanted more than 0");
    if (point.errors < 0.0 || point.errors > point.bits) {
      problem(row.line, "found " + exact(point.errors) + " errors in " + exact(point.bits) + " bits; wanted 0 to as many as the bits");
    }
    if (std::abs(point.phase_ui) > 1.0) problem(row.line, "column phase_ui: found " + exact(point.phase_ui) + ", wanted -1 to 1");
    auto scan = std::find_if(scans.begin(), scans.end(), [&](const EyeScan& s) { return s.lane == lane; });
    if (scan == scans.end()) {
      scans.push_back({lane, {}});
      scan = scans.end() - 1;
    }
    scan->points.push_back(point);
  }
  if (!notes.empty()) return {std::nullopt, std::move(notes)};
  return {std::move(scans), {}};
}

ScanFit fit_scan(const EyeModel& model, const Settings& settings, const EyeScan& scan, const RunControl& control) {
  const bool tells = std::any_of(scan.points.begin(), scan.points.end(), [](const ScanPoint& p) {
    return p.errors > 0.0 && p.errors < 0.5 * p.bits;
  });
  if (!tells) throw std::invalid_argument("fit_scan: no point has errors between none and half of its bits");

  std::map<Eigen::Index, PhaseState> states;
  for (const ScanPoint& p : scan.points) {
    const Eigen::Index at = samples_of(model, p.phase_ui);
    if (!states.contains(at)) states.emplace(at, phase_state(model, settings, at));
  }
  ScanFit fit;
  fit.num_points = static_cast<int>(scan.points.size());
  const auto ratios = [&](double gain, double noise_v, double random_ui) {
    std::vector<double> p(scan.points.size());
    parallel_for(static_cast<int>(p.size()), control.num_threads, [&](int i) {
      const ScanPoint& point = scan.points[static_cast<std::size_t>(i)];
      p[static_cast<std::size_t>(i)] = std::clamp(
          error_ratio_at(states.at(samples_of(model, point.phase_ui)), noise_v, random_ui, point.offset_v / gain), 1e-30, 1.0);
    });
    return p;
  };
  // x = (ln gain, ln noise, ln jitter): positive whatever the step. Binomial likelihood: points
  // beyond the crossing have large error ratios.
  const auto cost = [&](const std::vector<double>& x) {
    ++fit.num_evaluations;
    const auto p = ratios(std::exp(x[0]), std::exp(x[1]), std::exp(x[2]));
    double sum = 0.0;
    for (std::size_t i = 0; i < p.size(); ++i) {
      const ScanPoint& point = scan.points[i];
      const double right = std::max(1.0 - p[i], 1e-30);
      sum -= point.errors * std::log(p[i]) + (point.bits - point.errors) * std::log(right);
    }
    return sum;
  };
  const auto residual_of = [&](double gain, double noise_v, double random_ui) {
    const auto p = ratios(gain, noise_v, random_ui);
    double sum = 0.0;
    double count = 0.0;
    for (std::size_t i = 0; i < p.size(); ++i) {
      const double expected = p[i] * scan.points[i].bits;
      if (expected < 5.0 && scan.points[i].errors < 5.0) continue;  // too few for a normal deviate
      const double variance = std::max(expected * (1.0 - p[i]), 1.0);
      sum += std::pow(scan.points[i].errors - expected, 2) / variance;
      count += 1.0;
    }
    return count > 0.0 ? std::sqrt(sum / count) : 0.0;
  };

  const double noise_v = std::max(model.states.at(settings.ctle_index).noise_v, 1e-4 * std::abs(states.begin()->second.signal_v) + 1e-7);
  const double jitter_ui = std::max(model.link.jitter.random_ui, 1e-3);
  fit.residual_before = residual_of(1.0, noise_v, model.link.jitter.random_ui);
  std::vector<double> best = {0.0, std::log(noise_v), std::log(jitter_ui)};
  double best_cost = cost(best);
  // Several starts: with too little noise the likelihood is all but flat.
  for (const double factor : {1.0, 4.0, 16.0}) {
    if (control.stopped()) break;
    nlopt::opt optimizer(nlopt::LN_SBPLX, 3);
    optimizer.set_min_objective([](const std::vector<double>& x, std::vector<double>&, void* data) {
      return (*static_cast<decltype(cost)*>(data))(x);
    }, const_cast<void*>(static_cast<const void*>(&cost)));
    optimizer.set_lower_bounds({std::log(0.2), std::log(1e-7), std::log(1e-5)});
    optimizer.set_upper_bounds({std::log(5.0), std::log(1.0), std::log(0.3)});
    optimizer.set_initial_step({0.05, 0.4, 0.4});
    optimizer.set_ftol_rel(1e-12);
    optimizer.set_xtol_rel(1e-6);
    optimizer.set_maxeval(250);
    std::vector<double> x = {0.0, std::log(noise_v * factor), std::log(jitter_ui * std::min(factor, 4.0))};
    double value = 0.0;
    try {
      optimizer.optimize(x, value);
    } catch (const std::exception&) {
      continue;  // rounding stopped it; the other starts remain
    }
    if (value < best_cost) {
      best_cost = value;
      best = x;
    }
    if (factor > 1.0 && value > best_cost - 1e-3) break;
  }

  // Curvature in the logarithms; a value that hardly moves the likelihood has no error.
  Eigen::Matrix3d hessian;
  const double step = 2e-3;
  const auto shifted = [&](int i, double a, int j, double b) {
    std::vector<double> x = best;
    x[static_cast<std::size_t>(i)] += a;
    x[static_cast<std::size_t>(j)] += b;
    return cost(x);
  };
  for (int i = 0; i < 3; ++i) {
    for (int j = 0; j <= i; ++j) {
      const double h = i == j ? (shifted(i, step, j, 0.0) - 2.0 * best_cost + shifted(i, -step, j, 0.0)) / (step * step)
                              : (shifted(i, step, j, step) - shifted(i, step, j, -step) - shifted(i, -step, j, step) +
                                 shifted(i, -step, j, -step)) / (4.0 * step * step);
      hessian(i, j) = hessian(j, i) = h;
    }
  }
  const double values[3] = {std::exp(best[0]), std::exp(best[1]), std::exp(best[2])};
  FittedValue* slots[3] = {&fit.gain, &fit.noise_v, &fit.random_ui};
  std::vector<int> known;
  for (int i = 0; i < 3; ++i) {
    slots[i]->value = values[i];
    if (hessian(i, i) > 1.0) known.push_back(i);
  }
  const auto n = static_cast<Eigen::Index>(known.size());
  Eigen::MatrixXd part(n, n);
  for (Eigen::Index i = 0; i < n; ++i) {
    for (Eigen::Index j = 0; j < n; ++j) part(i, j) = hessian(known[static_cast<std::size_t>(i)], known[static_cast<std::size_t>(j)]);
  }
  if (n > 0) {
    const Eigen::MatrixXd covariance = part.ldlt().solve(Eigen::MatrixXd::Identity(n, n));
    for (Eigen::Index i = 0; i < n; ++i) {
      const int which = known[static_cast<std::size_t>(i)];
      if (covariance(i, i) > 0.0) slots[which]->standard_error = values[which] * std::sqrt(covariance(i, i));
    }
  }
  fit.residual = residual_of(values[0], values[1], values[2]);
  return fit;
}

}  // namespace tapwright
