#include "tapwright/eye/objective.hpp"

#include <algorithm>
#include <cmath>
#include <functional>
#include <limits>
#include <memory>
#include <vector>

#include "eye/instant.hpp"
#include "eye/tail_contour.hpp"
#include "tapwright/base/normal.hpp"
#include "tapwright/eye/coded_worst_case.hpp"

namespace tapwright {
namespace {

/// The eye at one place; immutable, shared by the functions of one Objective.
struct Shared {
  PlacedEye eye;
  LineCode code;
  Eigen::Index num_taps = 0;
  Eigen::Index num_dfe = 0;

  [[nodiscard]] const Link& link() const { return eye.model->link; }
};

/// Gradient of the height at one instant by x, from the derivatives of the level that is taken off:
/// by the symbol terms (cursors but the main one, DFE taps beyond the span, ...), by the dual-Dirac
/// terms A_DD h_J,k and by sigma. `by_taps` is what else half of the height gains by the taps.
Eigen::VectorXd gradient_of(const Shared& shared, const CursorMap& map, const Instant& instant,
                            const ExceededLevel& level, const Eigen::VectorXd& by_taps) {
  const Link& link = shared.link();
  const Eigen::Index main = map.main_index;
  const Eigen::Index num_cursors = map.cursors.rows();
  Eigen::VectorXd by_residual = Eigen::VectorXd::Zero(num_cursors);
  by_residual.head(main) = level.by_symbols.head(main);
  by_residual.tail(num_cursors - 1 - main) = level.by_symbols.segment(main, num_cursors - 1 - main);

  Eigen::VectorXd x(shared.num_taps + shared.num_dfe);
  Eigen::Index beyond = num_cursors - 1;
  for (std::size_t i = 0; i < map.dfe_rows.size(); ++i) {
    const Eigen::Index row = map.dfe_rows[i];
    x[shared.num_taps + static_cast<Eigen::Index>(i)] =
        row >= 0 ? by_residual[row] : level.by_symbols[beyond++];
  }
  Eigen::VectorXd by_cursor = -by_residual;
  by_cursor[main] += signal_share(link.signal);
  const double sigma_v = instant.sigma_v();
  const double by_variance = sigma_v > 0.0 ? level.by_sigma / sigma_v : 0.0;
  by_cursor[main] -= by_variance * shared.eye.transmitter_noise_ratio *
                     shared.eye.transmitter_noise_ratio * instant.main_v();
  x.head(shared.num_taps) = by_taps + map.cursors.transpose() * by_cursor;
  if (instant.slope.size() > 0) {
    const Jitter& jitter = link.jitter;
    const double random_ui2 = jitter.random_ui * jitter.random_ui;
    const Eigen::VectorXd by_slope =
        by_variance * random_ui2 * symbol_variance(link.signal.levels) * instant.slope +
        jitter.dual_dirac_peak_ui * level.by_binary;
    x.head(shared.num_taps) -= map.jitter.transpose() * by_slope;
  }
  return 2.0 * x;
}

double worst_case(const Shared& shared, const Eigen::VectorXd& x, Eigen::VectorXd* gradient) {
  const Eigen::VectorXd fir = x.head(shared.num_taps);
  const Eigen::VectorXd dfe_v = x.tail(shared.num_dfe);
  if (gradient == nullptr) return coded_worst_case_height_v(shared.eye, shared.code, fir, dfe_v);

  const CursorMap* least_map = nullptr;
  double least_v = std::numeric_limits<double>::infinity();
  for (const CursorMap& map : shared.eye.phases) {
    const double height_v = worst_case_height_at(shared.eye, shared.code, map, fir, dfe_v);
    if (height_v < least_v) {
      least_v = height_v;
      least_map = &map;
    }
  }
  const Instant instant = instant_of(shared.eye, *least_map, fir, dfe_v);
  const CrosstalkPeak crosstalk = crosstalk_peak(shared.eye, fir);
  const Eigen::VectorXd& r = instant.residual.values;
  const Eigen::Index main = instant.residual.main_index;
  Eigen::VectorXd signs = r.cwiseSign();
  if (!shared.code.independent()) signs = CodedIsi(shared.code, r.size(), main).cut(r).signs;
  ExceededLevel loss;
  loss.by_symbols.resize(r.size() - 1 + instant.beyond_dfe_v.size());
  loss.by_symbols << signs.head(main), signs.tail(r.size() - 1 - main),
      instant.beyond_dfe_v.cwiseSign();
  loss.by_binary = instant.slope.cwiseSign();
  loss.by_sigma = shared.eye.quantile;
  *gradient = gradient_of(shared, *least_map, instant, loss, -crosstalk.supergradient);
  return least_v - 2.0 * crosstalk.worst_v;
}

double at_error_ratio_value(const Shared& shared, const Eigen::VectorXd& x) {
  return at_error_ratio_height_v(shared.eye, shared.code, x.head(shared.num_taps),
                                 x.tail(shared.num_dfe));
}

/// Central differences: for the cases in which N(P) comes without derivatives.
Eigen::VectorXd differences(const Shared& shared, const Eigen::VectorXd& x) {
  Eigen::VectorXd gradient(x.size());
  for (Eigen::Index i = 0; i < x.size(); ++i) {
    // Wide enough that N(P)'s own error is small, narrow enough that its curvature is.
    const double step = 2.5e-4 * (i < shared.num_taps ? 1.0 : shared.eye.amplitude_v);
    Eigen::VectorXd moved = x;
    moved[i] = x[i] + step;
    const double up_v = at_error_ratio_value(shared, moved);
    moved[i] = x[i] - step;
    gradient[i] = (up_v - at_error_ratio_value(shared, moved)) / (2.0 * step);
  }
  return gradient;
}

double at_error_ratio(const Shared& shared, const Eigen::VectorXd& x, Eigen::VectorXd* gradient) {
  if (gradient == nullptr) return at_error_ratio_value(shared, x);
  const Link& link = shared.link();
  if (!shared.code.independent() || link.jitter.common_random_ui > 0.0) {
    *gradient = differences(shared, x);
    return at_error_ratio_value(shared, x);
  }
  const Eigen::VectorXd fir = x.head(shared.num_taps);
  const Eigen::VectorXd dfe_v = x.tail(shared.num_dfe);
  const Eigen::VectorXd aggressors_v = aggressors_at_error_ratio(shared.eye, fir);
  const CursorMap* least_map = nullptr;
  double least_v = std::numeric_limits<double>::infinity();
  ExceededLevel least_level;
  for (const CursorMap& map : shared.eye.phases) {
    const Instant instant = instant_of(shared.eye, map, fir, dfe_v);
    ExceededLevel level = exceeded_level_with_gradient(
        disturbance_of(shared.eye, instant, aggressors_v), link.target.error_ratio);
    const double height_v =
        2.0 * (instant.signal_v - level.level_v - link.device.receiver.sensitivity_v);
    if (height_v < least_v) {
      least_v = height_v;
      least_map = &map;
      least_level = std::move(level);
    }
  }
  const Instant instant = instant_of(shared.eye, *least_map, fir, dfe_v);
  Eigen::VectorXd by_taps = Eigen::VectorXd::Zero(shared.num_taps);
  Eigen::Index first = instant.residual.values.size() - 1 + instant.beyond_dfe_v.size();
  for (std::size_t i = 0; i < link.crosstalk.size(); ++i) {
    const AggressorCursors cursors =
        aggressor_cursors(shared.eye, i, fir, AggressorPhase::kLargestVariance);
    const Eigen::Index n = cursors.values_v.size();
    by_taps -= cursors.by_fir.transpose() * least_level.by_symbols.segment(first, n);
    first += n;
  }
  *gradient = gradient_of(shared, *least_map, instant, least_level, by_taps);
  return least_v;
}

/// 2 (signal - max over m of [the m largest terms + sigma Phi^-1(1 - 2^(m+1) P)] - sensitivity).
///
/// The m largest of the independent +-b_k stand together with probability 2^-m; what is left of
/// them is symmetric and so helps in at least half of the cases. Each entry is convex in x while
/// its quantile is >= 0. Aggressors count among what is left: their phase follows the taps.
double error_ratio_bound(const Shared& shared, const Eigen::VectorXd& x,
                         Eigen::VectorXd* gradient) {
  const Link& link = shared.link();
  const Eigen::VectorXd fir = x.head(shared.num_taps);
  const Eigen::VectorXd dfe_v = x.tail(shared.num_dfe);
  double least_v = std::numeric_limits<double>::infinity();
  for (const CursorMap& map : shared.eye.phases) {
    const Instant instant = instant_of(shared.eye, map, fir, dfe_v);
    const Disturbance disturbance = disturbance_of(shared.eye, instant, Eigen::VectorXd());
    const std::vector<double> terms = binary_amplitudes(disturbance);
    std::vector<std::size_t> order(terms.size());
    for (std::size_t i = 0; i < order.size(); ++i) order[i] = i;
    const auto tail_of = [&](std::size_t m) {
      return std::ldexp(link.target.error_ratio, static_cast<int>(m) + 1);
    };
    std::size_t most = 0;
    while (most < terms.size() && tail_of(most + 1) <= 0.5) ++most;
    std::partial_sort(
        order.begin(), order.begin() + static_cast<std::ptrdiff_t>(most), order.end(),
        [&](std::size_t a, std::size_t b) { return std::abs(terms[a]) > std::abs(terms[b]); });
    const double sigma_v = instant.sigma_v();
    double sum_v = 0.0;
    double best_v = -std::numeric_limits<double>::infinity();
    double best_quantile = 0.0;
    std::size_t best_m = 0;
    for (std::size_t m = 0; m <= most; ++m) {
      if (m > 0) sum_v += std::abs(terms[order[m - 1]]);
      const double quantile = gaussian_quantile_of_tail(tail_of(m));
      if (sum_v + sigma_v * quantile > best_v) {
        best_v = sum_v + sigma_v * quantile;
        best_quantile = quantile;
        best_m = m;
      }
    }
    const double height_v = 2.0 * (instant.signal_v - best_v - link.device.receiver.sensitivity_v);
    if (!(height_v < least_v)) continue;
    least_v = height_v;
    if (gradient == nullptr) continue;
    std::vector<double> signs(terms.size(), 0.0);
    for (std::size_t m = 0; m < best_m; ++m) {
      signs[order[m]] = terms[order[m]] < 0.0 ? -1.0 : 1.0;
    }
    ExceededLevel level = gathered(disturbance, signs);
    level.by_sigma = best_quantile;
    *gradient = gradient_of(shared, map, instant, level, Eigen::VectorXd::Zero(shared.num_taps));
  }
  return least_v;
}

}  // namespace

Objective objective_at(const EyeModel& model, ObjectiveKind kind, const Place& place) {
  const auto shared = std::make_shared<const Shared>(
      Shared{place_eye(model, place), code_of(model),
             static_cast<Eigen::Index>(model.link.device.transmitter.fir.taps.size()),
             static_cast<Eigen::Index>(model.link.device.receiver.dfe.size())});
  Objective objective;
  objective.num_taps = shared->num_taps;
  objective.num_dfe = shared->num_dfe;
  if (kind == ObjectiveKind::kWorstCase) {
    objective.is_concave = true;
    objective.value_v = [shared](const Eigen::VectorXd& x, Eigen::VectorXd* gradient) {
      return worst_case(*shared, x, gradient);
    };
    objective.upper_bound_v = objective.value_v;
    return objective;
  }
  objective.value_v = [shared](const Eigen::VectorXd& x, Eigen::VectorXd* gradient) {
    return at_error_ratio(*shared, x, gradient);
  };
  if (shared->code.independent() && model.link.jitter.common_random_ui == 0.0 &&
      model.link.target.error_ratio <= 0.25) {
    objective.upper_bound_v = [shared](const Eigen::VectorXd& x, Eigen::VectorXd* gradient) {
      return error_ratio_bound(*shared, x, gradient);
    };
  }
  return objective;
}

}  // namespace tapwright
