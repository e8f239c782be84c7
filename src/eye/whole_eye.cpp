#include "tapwright/eye/whole_eye.hpp"

#include <algorithm>
#include <cmath>
#include <complex>
#include <limits>
#include <numbers>
#include <optional>
#include <stdexcept>
#include <unsupported/Eigen/FFT>
#include <vector>

#include "eye/instant.hpp"
#include "eye/tail_contour.hpp"
#include "tapwright/base/normal.hpp"

namespace tapwright {
namespace {

constexpr int kMaxPoints = 1 << 16;
constexpr double kNoTail = 1e-30;

/// Tail and density on a grid x = 0, dx, 2 dx ..., seen along one vertical line of the cumulant.
struct TailTable {
  double dx_v = 0.0;
  std::vector<double> log_tail;  ///< ends where the tail falls under kNoTail
  std::vector<double> density;
};

/// The trapezoid sums of a contour at all x of one period by one transform.
///
/// Frequencies beyond the transform's size fold back: at the grid's own x that is exact.
/// Below `from_v` the line sees too little of the tail; those entries are not meant to be read.
TailTable table_of(const TailContour& contour, double from_v, int size, Eigen::FFT<double>& fft) {
  const auto n = static_cast<std::size_t>(size);
  std::vector<std::complex<double>> over_z(n);
  std::vector<std::complex<double>> plain(n);
  for (std::size_t j = 0; j < contour.real().size(); ++j) {
    const std::complex<double> value(contour.real()[j], contour.imag()[j]);
    const std::complex<double> z(contour.theta(), static_cast<double>(j) * contour.step());
    plain[j % n] += value;
    over_z[j % n] += value / z;
  }
  // Two real sequences in one complex transform: both spectra made Hermitian.
  std::vector<std::complex<double>> both(n);
  const std::complex<double> i(0.0, 1.0);
  for (std::size_t j = 0; j < n; ++j) {
    const std::size_t mirror = (n - j) % n;
    both[j] = over_z[j] + std::conj(over_z[mirror]) + i * (plain[j] + std::conj(plain[mirror]));
  }
  std::vector<std::complex<double>> sums;
  fft.fwd(sums, both);
  TailTable table;
  table.dx_v = 2.0 * std::numbers::pi / (contour.step() * size);
  const double log_scale = std::log(contour.step() / (2.0 * std::numbers::pi)) + contour.k();
  for (std::size_t m = 0; m < n; ++m) {
    const double log_factor = log_scale - contour.theta() * static_cast<double>(m) * table.dx_v;
    const double log_tail = sums[m].real() > 0.0 ? log_factor + std::log(sums[m].real())
                                                 : -std::numeric_limits<double>::infinity();
    if (log_tail < std::log(kNoTail) && static_cast<double>(m) * table.dx_v > from_v) break;
    table.log_tail.push_back(log_tail);
    table.density.push_back(std::max(0.0, std::exp(log_factor) * sums[m].imag()));
  }
  return table;
}

/// X of one phase, from its middle to P = 1e-30.
class PhaseDistribution {
 public:
  PhaseDistribution(const Cumulant& cumulant, int size, Eigen::FFT<double>& fft) {
    if (!(cumulant.variance_v2() > 0.0)) return;  // a step: nothing disturbs
    if (cumulant.sigma_v() > 0.0 && from_contours(cumulant, size, fft)) return;
    const double range_v = 2.0 * (cumulant.worst_v() + 10.0 * cumulant.sigma_v());
    grid_ = grid_distribution(cumulant, range_v / (4.0 * size));
  }

  [[nodiscard]] double tail(double x) const {
    if (x < 0.0) return 1.0 - tail(-x);
    if (grid_) return grid_->exceedance(x);
    const TailTable* table = at(x);
    if (table == nullptr) return x > 0.0 ? 0.0 : 0.5;
    const double place = x / table->dx_v;
    const auto i = static_cast<std::size_t>(place);
    const auto& y = table->log_tail;
    if (i + 1 >= y.size()) return 0.0;
    const double t = place - static_cast<double>(i);
    if (i == 0 || i + 2 >= y.size()) return std::exp(y[i] + t * (y[i + 1] - y[i]));
    // Catmull-Rom cubic in ln P.
    const double a = y[i - 1];
    const double b = y[i];
    const double c = y[i + 1];
    const double d = y[i + 2];
    return std::exp(
        b +
        0.5 * t * (c - a + t * (2.0 * a - 5.0 * b + 4.0 * c - d + t * (3.0 * (b - c) + d - a))));
  }

  [[nodiscard]] double density(double x) const {
    x = std::abs(x);
    if (grid_) {
      const auto i = grid_->zero_index + static_cast<Eigen::Index>(std::lround(x / grid_->step_v));
      return i < grid_->mass.size() ? grid_->mass[i] / grid_->step_v : 0.0;
    }
    const TailTable* table = at(x);
    if (table == nullptr) return 0.0;
    const double place = x / table->dx_v;
    const auto i = static_cast<std::size_t>(place);
    if (i + 1 >= table->density.size()) return 0.0;
    const double t = place - static_cast<double>(i);
    return (1.0 - t) * table->density[i] + t * table->density[i + 1];
  }

 private:
  /// A line at one sigma for the body, one at six for the tail. Rounding leaves 1e-16 of the
  /// largest value along a line, e^(-(q - q_line)^2 / 2) of which stands at q: enough from -5
  /// to 13.
  bool from_contours(const Cumulant& cumulant, int size, Eigen::FFT<double>& fft) {
    constexpr double kLines[] = {1.0, 6.0};
    constexpr double kSwitch = 3.5;
    constexpr double kLast[] = {1e-5, 1e-20};  // least tail that each line serves
    const auto switch_theta = cumulant.theta_of_quantile(kSwitch);
    if (!switch_theta) return false;
    switch_v_ = cumulant.at(*switch_theta).k1;
    for (int line = 0; line < 2; ++line) {
      const auto theta = cumulant.theta_of_quantile(kLines[line]);
      if (!theta) return false;
      const Cumulant::At at = cumulant.at(*theta);
      // No shorter than what repeats below 1e-6: to the left the tail is at most 1, to the right
      // the tilted distribution has died away 8 of its deviations beyond its mean.
      const double period_v =
          std::max({(std::log(1.0 / kLast[line]) + 14.0) / *theta, at.k1 + 8.0 * std::sqrt(at.k2),
                    (*theta * at.k1 - at.k + 17.0) / *theta});
      const auto contour = TailContour::along(cumulant, *theta, period_v, kMaxPoints);
      if (!contour) return false;
      // The cubic reads a step to either side.
      const double margin_v = 2.0 * period_v / size;
      tables_[line] = table_of(*contour, line == 0 ? 0.0 : switch_v_ - margin_v, size, fft);
    }
    return true;
  }

  [[nodiscard]] const TailTable* at(double x) const {
    const TailTable& table = tables_[x < switch_v_ ? 0 : 1];
    return table.dx_v > 0.0 ? &table : nullptr;
  }

  TailTable tables_[2];
  double switch_v_ = 0.0;
  std::optional<GridDistribution> grid_;
};

/// X of one phase under a line code: levels at some probabilities, between them linear in the
/// normal quantile, as a Gaussian is exactly. What is more likely than 0.3 is taken as of
/// independent symbols: no eye is measured there.
class CodedPhase {
 public:
  CodedPhase(Tail tail, const PhaseDistribution& independent) : independent_(&independent) {
    for (const double probability :
         {kLargest, 0.1, 0.02, 3e-3, 1e-4, 1e-6, 1e-8, 1e-10, 1e-12, 1e-14, 1e-16, 1e-18, 1e-20}) {
      quantiles_.push_back(gaussian_quantile_of_tail(probability));
      levels_v_.push_back(tail.exceeded_level_v(probability));
    }
  }
  [[nodiscard]] double tail(double x) const {
    if (x < levels_v_.front()) return std::max(independent_->tail(x), kLargest);
    const auto above = std::upper_bound(levels_v_.begin(), levels_v_.end() - 1, x);
    const auto i = static_cast<std::size_t>(above - levels_v_.begin());
    const double run_v = levels_v_[i] - levels_v_[i - 1];
    if (!(run_v > 0.0)) return 0.0;
    const double slope = (quantiles_[i] - quantiles_[i - 1]) / run_v;
    return gaussian_tail(quantiles_[i - 1] + slope * (x - levels_v_[i - 1]));
  }
  [[nodiscard]] double density(double x) const { return independent_->density(x); }

 private:
  static constexpr double kLargest = 0.3;
  const PhaseDistribution* independent_;
  std::vector<double> quantiles_;
  std::vector<double> levels_v_;
};

/// Main symbols: +-1 and, with four levels, +-R/3: the middle eye takes the whole mismatch.
std::vector<double> symbol_levels(const Signal& signal) {
  std::vector<double> levels;
  for (int i = 0; i < signal.levels; ++i) {
    levels.push_back((2.0 * i - (signal.levels - 1.0)) / (signal.levels - 1.0));
  }
  if (signal.levels == 4) {
    levels[1] *= signal.level_mismatch;
    levels[2] *= signal.level_mismatch;
  }
  return levels;
}

/// The mean over a Gaussian clock of sigma steps, for every `split`-th column of `wide` that has
/// `reach` steps to either side.
Eigen::MatrixXd averaged_over_phase(const Eigen::MatrixXd& wide, double sigma, Eigen::Index reach,
                                    Eigen::Index split) {
  Eigen::VectorXd weights(2 * reach + 1);
  for (Eigen::Index i = -reach; i <= reach; ++i) {
    weights[i + reach] = std::exp(-0.5 * std::pow(static_cast<double>(i) / sigma, 2));
  }
  weights /= weights.sum();
  const Eigen::Index num = (wide.cols() - weights.size()) / split + 1;
  Eigen::MatrixXd mean(wide.rows(), num);
  for (Eigen::Index i = 0; i < num; ++i) {
    mean.col(i) = wide.middleCols(i * split, weights.size()) * weights;
  }
  return mean;
}

}  // namespace

WholeEye whole_eye(const EyeModel& model, const Settings& settings, const WholeEyeGrid& grid) {
  require_fit(model, settings);
  if (grid.num_levels < 2 || (grid.max_level_v && !(*grid.max_level_v > 0.0))) {
    throw std::invalid_argument("whole_eye: wanted at least 2 levels and a range > 0");
  }
  const PlacedEye eye = place_eye(model, place_of(settings));
  const LineCode code = code_of(model);
  const Eigen::VectorXd aggressors_v = aggressors_at_error_ratio(eye, settings.fir);
  const int per_ui = model.input.samples_per_ui();
  const double clock_samples =
      per_ui >= kLeastSamplesPerUi ? model.link.jitter.common_random_ui * per_ui : 0.0;
  const auto reach = static_cast<Eigen::Index>(std::ceil(8.0 * clock_samples));
  // Phases half a sigma of the clock apart or closer, so that sums over them are integrals.
  const Eigen::Index split =
      reach > 0 ? std::clamp<Eigen::Index>(std::lround(std::ceil(2.0 / clock_samples)), 1, 16) : 1;
  const Eigen::Index first = -(per_ui / 2) - reach;
  const Eigen::Index num_phases = split * (per_ui + 2 * reach - 1) + 1;

  std::vector<Instant> instants;
  std::vector<Cumulant> cumulants;
  double max_level_v = 0.0;
  for (Eigen::Index i = 0; i < num_phases; ++i) {
    instants.push_back(instant_of(
        eye,
        cursor_map(model, eye.place,
                   static_cast<double>(first) + static_cast<double>(i) / static_cast<double>(split),
                   eye.amplitude_v),
        settings.fir, settings.dfe_v));
    cumulants.emplace_back(with_least_noise(disturbance_of(eye, instants.back(), aggressors_v)));
    const Cumulant& c = cumulants.back();
    max_level_v = std::max(max_level_v, std::abs(instants.back().main_v()) +
                                            std::min(6.0 * std::sqrt(c.variance_v2()),
                                                     c.worst_v() + 6.0 * c.sigma_v()));
  }
  max_level_v = grid.max_level_v.value_or(max_level_v > 0.0 ? max_level_v : 1.0);

  WholeEye whole;
  whole.levels_v = Eigen::VectorXd::LinSpaced(grid.num_levels, -max_level_v, max_level_v);
  const double bin_v = whole.levels_v[1] - whole.levels_v[0];
  const std::vector<double> symbols = symbol_levels(model.link.signal);
  int size = 256;
  while (size < 2 * grid.num_levels) size *= 2;
  whole.one_sided.resize(grid.num_levels, num_phases);
  whole.density = Eigen::MatrixXd::Zero(grid.num_levels, num_phases);
  Eigen::FFT<double> fft;
  const auto fill = [&](Eigen::Index phase, const auto& distribution) {
    const Instant& instant = instants[static_cast<std::size_t>(phase)];
    for (Eigen::Index level = 0; level < whole.levels_v.size(); ++level) {
      const double v = whole.levels_v[level];
      whole.one_sided(level, phase) = distribution.tail(instant.signal_v - v);
      double density = 0.0;
      for (const double symbol : symbols) {
        density += distribution.density(v - symbol * instant.main_v());
      }
      whole.density(level, phase) = density * bin_v / static_cast<double>(symbols.size());
    }
  };
  for (Eigen::Index i = 0; i < num_phases; ++i) {
    const auto at = static_cast<std::size_t>(i);
    const PhaseDistribution independent(cumulants[at], size, fft);
    if (code.independent()) {
      fill(i, independent);
    } else {
      fill(i, CodedPhase(Tail(eye, code, instants[at], aggressors_v, true), independent));
    }
  }
  if (reach > 0) {
    const auto averaged = [&](const Eigen::MatrixXd& wide) {
      return averaged_over_phase(wide, clock_samples * static_cast<double>(split), reach * split,
                                 split);
    };
    whole.one_sided = averaged(whole.one_sided);
    whole.density = averaged(whole.density);
  }
  whole.error_ratio = 0.5 * (whole.one_sided + whole.one_sided.colwise().reverse());
  whole.sampling_index = per_ui / 2;
  whole.phases_ui.resize(per_ui);
  for (Eigen::Index i = 0; i < per_ui; ++i) {
    whole.phases_ui[i] = static_cast<double>(i - whole.sampling_index) / per_ui;
  }
  return whole;
}

Eigen::VectorXd WholeEye::contour_v(double one_sided_probability) const {
  Eigen::VectorXd contour(phases_ui.size());
  for (Eigen::Index i = 0; i < contour.size(); ++i) {
    // The probability rises with the threshold.
    const auto column = one_sided.col(i);
    Eigen::Index above = 0;
    while (above < column.size() && column[above] <= one_sided_probability) ++above;
    if (above == 0 || above == column.size()) {
      contour[i] = std::numeric_limits<double>::quiet_NaN();
      continue;
    }
    const double low = column[above - 1];
    const double high = column[above];
    const double share = low > 0.0 ? std::log(one_sided_probability / low) / std::log(high / low)
                                   : (one_sided_probability - low) / (high - low);
    contour[i] = levels_v[above - 1] + share * (levels_v[above] - levels_v[above - 1]);
  }
  return contour;
}

Eigen::VectorXd WholeEye::bathtub_over_phase() const {
  // The middle lies between two levels when their number is even.
  const Eigen::Index last = levels_v.size() - 1;
  return 0.5 * (error_ratio.row(last / 2) + error_ratio.row(last - last / 2)).transpose();
}

Eigen::VectorXd WholeEye::bathtub_over_level() const { return error_ratio.col(sampling_index); }

}  // namespace tapwright
