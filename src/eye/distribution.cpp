#include "tapwright/eye/distribution.hpp"

#include <algorithm>
#include <cmath>
#include <numbers>
#include <stdexcept>
#include <string>

#include "eye/tail_contour.hpp"
#include "tapwright/base/normal.hpp"

namespace tapwright {
namespace {

constexpr int kMaxPoints = 1 << 14;
constexpr double kFineStepV = 10e-6;
constexpr double kMaxBins = 65536.0;
constexpr double kLeastExtraV = 5e-6;

void require_tail(double probability) {
  if (!(probability > 0.0 && probability < 0.5)) {
    throw std::invalid_argument("exceeded_level_v: the probability must lie in (0, 0.5), found " +
                                std::to_string(probability));
  }
}

struct Located {
  TailContour contour;
  double contour_level_v = 0.0;  ///< N(P) of the sum that the contour belongs to
  double level_v = 0.0;          ///< N(P) of the sum asked for
};

/// N(P) by the contour of `cumulant` itself; empty where it would need too many points.
std::optional<Located> locate_directly(const Cumulant& cumulant, double probability) {
  if (!(cumulant.sigma_v() > 0.0)) return std::nullopt;
  std::optional<double> theta = cumulant.theta_of_quantile(gaussian_quantile_of_tail(probability));
  for (int attempt = 0; attempt < 3 && theta; ++attempt) {
    const Cumulant::At at = cumulant.at(*theta);
    auto contour = TailContour::along(cumulant, *theta,
                                      TailContour::period_for(*theta, at, probability), kMaxPoints);
    if (!contour) return std::nullopt;
    const double level_v = contour->level_of(probability, at.k1);
    // Far from the saddle the sum would cancel; then the line is laid anew through the level.
    if (std::abs(level_v - at.k1) * *theta < 8.0) {
      return Located{std::move(*contour), level_v, level_v};
    }
    theta = level_v > 0.0 ? cumulant.theta_of_level(level_v) : std::nullopt;
  }
  return std::nullopt;
}

/// The largest step of which all amplitudes are multiples, to a millionth of the largest; 0 when it
/// is so small that it does not matter.
double lattice_step_v(const std::vector<double>& amplitudes_v) {
  double step = amplitudes_v.empty() ? 0.0 : amplitudes_v.front();
  for (const double b : amplitudes_v) {
    double larger = step;
    double rest = b;
    while (rest > 1e-6 * amplitudes_v.front()) {
      const double next = std::abs(std::remainder(larger, rest));
      larger = rest;
      rest = next;
      if (larger < kFineStepV) return 0.0;
    }
    step = std::min(step, larger);
    if (step < kFineStepV) return 0.0;
  }
  return step;
}

/// N(P). The points of a contour grow as 1 / sigma, so little noise is met with a little more: N is
/// taken at sigma^2 + v and sigma^2 + v/2 and carried on to v = 0. Where N turns out not to be
/// linear in v (the derivative at v against the difference), or the amplitudes are multiples of a
/// step that v would wash out, v is quartered.
std::optional<Located> locate(const Cumulant& cumulant, double probability) {
  constexpr double kPoints = 192.0;
  const double sigma2 = cumulant.sigma_v() * cumulant.sigma_v();
  const auto widened = [&](double extra_v2) {
    return Cumulant(cumulant.amplitudes_v(), std::sqrt(sigma2 + extra_v2));
  };
  const double quantile = gaussian_quantile_of_tail(probability);
  const double total_v = std::sqrt(cumulant.variance_v2());
  // For the first guess theta = Q over the deviation: y_max / step = kPoints.
  double extra_v = 6.5 * (std::log(1.0 / probability) + 14.0) * total_v /
                   (quantile * 2.0 * std::numbers::pi * kPoints);
  if (!(extra_v > 4.0 * cumulant.sigma_v())) return locate_directly(cumulant, probability);
  const double lattice_v = lattice_step_v(cumulant.amplitudes_v());
  for (; extra_v > 4.0 * cumulant.sigma_v() && extra_v > kLeastExtraV; extra_v *= 0.5) {
    if (lattice_v < 4.0 * extra_v && lattice_v > 0.0) continue;
    const double v = extra_v * extra_v;
    const Cumulant wide = widened(v);
    const auto at_v = locate_directly(wide, probability);
    auto at_half = locate_directly(widened(0.5 * v), probability);
    if (!at_v || !at_half) continue;
    const double slope = at_v->contour.by_variance(at_v->level_v);
    const double difference_v = at_v->level_v - at_half->level_v;
    // What is left after carrying on is of the order of the bend, taken ten times for safety.
    const double bend_v = std::abs(difference_v - 0.5 * v * slope);
    if (10.0 * bend_v > 1e-7 + 1e-6 * at_half->level_v) continue;
    at_half->level_v -= difference_v;
    return at_half;
  }
  return locate_directly(cumulant, probability);
}

/// A step that is fine but leaves a grid of a bearable size; a fraction of the amplitudes' own step
/// where they have one, for then nothing is split.
double fallback_step(const Cumulant& cumulant) {
  const double range_v = 2.0 * (cumulant.worst_v() + 10.0 * cumulant.sigma_v());
  const double step_v = std::max(kFineStepV, range_v / kMaxBins);
  const double lattice_v = lattice_step_v(cumulant.amplitudes_v());
  return lattice_v > step_v ? lattice_v / std::ceil(lattice_v / step_v) : step_v;
}

}  // namespace

GridDistribution grid_distribution(const Cumulant& cumulant, double step_v) {
  if (!(step_v > 0.0)) {
    throw std::invalid_argument("grid_distribution: the step must be > 0");
  }
  const double sigma_v = cumulant.sigma_v();
  const auto reach =
      static_cast<Eigen::Index>(std::ceil((cumulant.worst_v() + 10.0 * sigma_v) / step_v) +
                                static_cast<double>(cumulant.amplitudes_v().size()) + 2.0);
  GridDistribution grid;
  grid.step_v = step_v;
  grid.zero_index = reach;
  Eigen::VectorXd mass = Eigen::VectorXd::Zero(2 * reach + 1);
  Eigen::Index support = 0;
  if (sigma_v > 0.0) {
    support = std::min(reach, static_cast<Eigen::Index>(std::ceil(10.0 * sigma_v / step_v)));
    for (Eigen::Index i = 0; i <= support; ++i) {
      // From the outer side, where differences of tails keep their relative accuracy.
      const double inner = (static_cast<double>(i) - 0.5) * step_v / sigma_v;
      const double outer = (static_cast<double>(i) + 0.5) * step_v / sigma_v;
      mass[reach + i] =
          i == 0 ? 1.0 - 2.0 * gaussian_tail(outer) : gaussian_tail(inner) - gaussian_tail(outer);
      mass[reach - i] = mass[reach + i];
    }
  } else {
    mass[reach] = 1.0;
  }
  Eigen::VectorXd next = Eigen::VectorXd::Zero(mass.size());
  for (const double b : cumulant.amplitudes_v()) {
    const double bins = b / step_v;
    const auto whole = static_cast<Eigen::Index>(std::floor(bins));
    const double far = 0.5 * (bins - static_cast<double>(whole));
    const double near = 0.5 - far;
    const Eigen::Index grown = std::min(reach, support + whole + (far > 0.0 ? 1 : 0));
    next.segment(reach - grown, 2 * grown + 1).setZero();
    const auto source = mass.segment(reach - support, 2 * support + 1);
    const auto add = [&](Eigen::Index shift, double weight) {
      if (weight == 0.0) return;
      next.segment(reach - support + shift, 2 * support + 1) += weight * source;
    };
    add(whole, near);
    add(-whole, near);
    add(whole + 1, far);
    add(-whole - 1, far);
    support = grown;
    mass.swap(next);
  }
  grid.tail.resize(mass.size());
  double sum = 0.0;
  for (Eigen::Index i = mass.size(); i-- > 0;) {
    sum += mass[i];
    grid.tail[i] = sum;
  }
  grid.mass = std::move(mass);
  return grid;
}

double exceeded_level_v(const Disturbance& disturbance, double probability) {
  require_tail(probability);
  const Cumulant cumulant(disturbance);
  if (!(cumulant.variance_v2() > 0.0)) return 0.0;
  if (cumulant.is_certain(probability)) return cumulant.worst_v();
  if (const auto located = locate(cumulant, probability)) return located->level_v;
  const double grid_v =
      grid_distribution(cumulant, fallback_step(cumulant)).exceeded_level_v(probability);
  // Without noise nothing lies beyond the worst case; the split's spread must not say so.
  return cumulant.sigma_v() > 0.0 ? grid_v : std::min(grid_v, cumulant.worst_v());
}

ExceededLevel exceeded_level_with_gradient(const Disturbance& disturbance, double probability) {
  require_tail(probability);
  const Cumulant cumulant(disturbance);
  const std::vector<double> amplitudes = binary_amplitudes(disturbance);
  std::vector<double> by_amplitude(amplitudes.size());
  double by_sigma = 0.0;
  double level_v = 0.0;
  if (const auto located = locate(cumulant, probability)) {
    level_v = located->level_v;
    located->contour.gradient(located->contour_level_v, amplitudes, disturbance.sigma_v,
                              by_amplitude, by_sigma);
  } else {
    level_v = exceeded_level_v(disturbance, probability);
    // Too little noise for the contour: the mean of each sign under the tilt that has its mean at
    // the level, or the worst case's signs where there is no such tilt.
    const auto theta = level_v > 0.0 ? cumulant.theta_of_level(level_v) : std::nullopt;
    for (std::size_t k = 0; k < amplitudes.size(); ++k) {
      by_amplitude[k] = theta ? std::tanh(*theta * amplitudes[k])
                              : static_cast<double>((amplitudes[k] > 0.0) - (amplitudes[k] < 0.0));
    }
    by_sigma = theta ? *theta * disturbance.sigma_v : 0.0;
  }
  ExceededLevel result = gathered(disturbance, by_amplitude);
  result.level_v = level_v;
  result.by_sigma = by_sigma;
  return result;
}

double exceedance(const Disturbance& disturbance, double level_v) {
  if (level_v < 0.0) return 1.0 - exceedance(disturbance, -level_v);
  const Cumulant cumulant(disturbance);
  const double variance_v2 = cumulant.variance_v2();
  if (!(variance_v2 > 0.0)) return level_v > 0.0 ? 0.0 : 0.5;
  if (cumulant.sigma_v() > 0.0) {
    // Near 0 the saddle meets the pole; a line one standard deviation off serves as well there.
    const double least = 1.0 / std::sqrt(variance_v2);
    const double theta = std::max(least, cumulant.theta_of_level(level_v).value_or(least));
    const Cumulant::At at = cumulant.at(theta);
    const double rough =
        std::max(1e-300, std::exp(at.k - theta * level_v) /
                             (1.0 + theta * std::sqrt(2.0 * std::numbers::pi * at.k2)));
    const auto contour = TailContour::along(
        cumulant, theta, TailContour::period_for(theta, at, std::min(rough, 0.5)), kMaxPoints);
    if (contour) return std::clamp(contour->exceedance(level_v), 0.0, 0.5);
  }
  return grid_distribution(cumulant, fallback_step(cumulant)).exceedance(level_v);
}

GridDistribution grid_distribution(const Disturbance& disturbance, double step_v) {
  return grid_distribution(Cumulant(disturbance), step_v);
}

double GridDistribution::exceedance(double level_v) const {
  // Bin i begins at (i - zero_index - 1/2) step.
  const double at = level_v / step_v + static_cast<double>(zero_index) + 0.5;
  if (at <= 0.0) return tail[0];
  const auto i = static_cast<Eigen::Index>(std::floor(at));
  if (i >= tail.size()) return 0.0;
  const double above = i + 1 < tail.size() ? tail[i + 1] : 0.0;
  const double share = at - static_cast<double>(i);
  if (!(above > 0.0)) return (1.0 - share) * tail[i];
  return std::exp((1.0 - share) * std::log(tail[i]) + share * std::log(above));
}

double GridDistribution::exceeded_level_v(double probability) const {
  // The tail falls with i: the first bin at whose lower edge no more than `probability` is left.
  const auto it =
      std::partition_point(tail.begin(), tail.end(), [&](double t) { return t > probability; });
  const auto i = static_cast<Eigen::Index>(it - tail.begin());
  const auto edge_v = [&](double index) {
    return (index - static_cast<double>(zero_index) - 0.5) * step_v;
  };
  if (i == 0) return edge_v(0.0);
  const double below = tail[i - 1];
  const double above = i < tail.size() ? tail[i] : 0.0;
  const double share =
      above > 0.0 ? (std::log(below) - std::log(probability)) / (std::log(below) - std::log(above))
                  : (below - probability) / below;
  return edge_v(static_cast<double>(i - 1) + share);
}

}  // namespace tapwright
