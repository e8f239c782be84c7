#include "tapwright/channel/line_fit.hpp"

#include <algorithm>
#include <cmath>
#include <complex>
#include <numbers>
#include <stdexcept>
#include <string>
#include <unsupported/Eigen/NonLinearOptimization>
#include <utility>
#include <vector>

#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/channel/frequency_response.hpp"

namespace tapwright {
namespace {

using std::numbers::pi;
using Complex = std::complex<double>;

constexpr double kReflectionWeight = 0.3;
constexpr Eigen::Index kMostPoints = 250;  ///< evenly picked; a uniform line is smooth

/// The points that are fitted.
struct Points {
  Eigen::VectorXd f;
  Eigen::MatrixXcd s;  ///< columns of s11, s21, s22
  double reference_ohm = 50.0;
};

/// What is fitted, as multiples of a first guess: a1, a2, tau, Z_c, then rise and knee, then Z and
/// delay of the ends.
struct Shape {
  bool dispersion = false;
  bool ends = false;
  friend bool operator==(const Shape&, const Shape&) = default;
  [[nodiscard]] int size() const { return 4 + (dispersion ? 2 : 0) + (ends ? 2 : 0); }
};

LineFit unpacked(const Eigen::VectorXd& x, const LineFit& guess, const Shape& shape) {
  LineFit fit = guess;
  AnnexLine& line = fit.model;
  // Loss can't be negative, and every other number keeps its sign: the magnitude is what counts.
  line.a1_sqrt_s_per_m *= std::abs(x[0]);
  line.a2_s_per_m *= std::abs(x[1]);
  line.tau_s_per_m *= std::abs(x[2]);
  line.z_c_ohm *= std::abs(x[3]);
  Eigen::Index i = 4;
  if (shape.dispersion) {
    line.dispersion = Dispersion{0.1 * std::abs(x[i]), guess.top_hz * std::abs(x[i + 1])};
    i += 2;
  }
  if (shape.ends) {
    fit.ends =
        EndSection{guess.ends->z_c_ohm * std::abs(x[i]), guess.ends->delay_s * std::abs(x[i + 1])};
  } else {
    fit.ends.reset();
  }
  return fit;
}

/// s11, s21, s22 as columns.
Eigen::MatrixXcd parameters(const LineFit& fit, double length_m, const Eigen::VectorXd& f,
                            double reference_ohm) {
  const Network line = line_network(fit.model, length_m, f, reference_ohm);
  Eigen::MatrixXcd out(f.size(), 3);
  for (Eigen::Index k = 0; k < f.size(); ++k) {
    Complex s11 = line.values(0, k), s21 = line.values(1, k);
    if (fit.ends) {
      // A line without loss at each side: s21 = t, s11 = r; the reflections in between add up.
      const double g = (fit.ends->z_c_ohm - reference_ohm) / (fit.ends->z_c_ohm + reference_ohm);
      const Complex e = std::polar(1.0, -2 * pi * f[k] * fit.ends->delay_s);
      const Complex r = g * (1.0 - e * e) / (1.0 - g * g * e * e);
      const Complex t = e * (1.0 - g * g) / (1.0 - g * g * e * e);
      const Complex first = s11, through = s21;  // of the line; both ends are alike
      const Complex behind = first + through * through * r / (1.0 - first * r);
      s11 = r + t * t * behind / (1.0 - r * behind);
      s21 = t * t * through / ((1.0 - r * first) * (1.0 - r * first) - r * r * through * through);
    }
    out.row(k) << s11, s21, s11;
  }
  return out;
}

/// Residuals for Levenberg and Marquardt's method.
struct Residuals {
  using Scalar = double;
  using InputType = Eigen::VectorXd;
  using ValueType = Eigen::VectorXd;
  using JacobianType = Eigen::MatrixXd;
  enum { InputsAtCompileTime = Eigen::Dynamic, ValuesAtCompileTime = Eigen::Dynamic };

  const Points& points;
  const LineFit& guess;
  Shape shape;

  [[nodiscard]] int inputs() const { return shape.size(); }
  [[nodiscard]] int values() const { return static_cast<int>(6 * points.f.size()); }
  [[nodiscard]] Eigen::VectorXd at(const Eigen::VectorXd& x) const {
    const LineFit fit = unpacked(x, guess, shape);
    Eigen::MatrixXcd rest =
        parameters(fit, guess.length_m, points.f, points.reference_ohm) - points.s;
    rest.col(0) *= kReflectionWeight;
    rest.col(2) *= kReflectionWeight;
    Eigen::VectorXd out(6 * points.f.size());
    out << rest.real().reshaped(), rest.imag().reshaped();
    return out;
  }
  int operator()(const Eigen::VectorXd& x, Eigen::VectorXd& out) const {
    // Zero impedance or knee would leave the domain of the model.
    out = at(x.cwiseAbs().cwiseMax(1e-6));
    return 0;
  }
};

struct Trial {
  Shape shape;
  LineFit fit;
  double residual = 0.0;
};

Trial tried(const Points& points, const LineFit& guess, const Shape& shape) {
  const Residuals residuals{points, guess, shape};
  Eigen::NumericalDiff<Residuals, Eigen::Central> differentiated(residuals);
  Eigen::LevenbergMarquardt<Eigen::NumericalDiff<Residuals, Eigen::Central>> solver(differentiated);
  solver.parameters.maxfev = 2000;
  solver.parameters.xtol = 1e-10;
  solver.parameters.ftol = 1e-12;
  Eigen::VectorXd x = Eigen::VectorXd::Ones(shape.size());
  (void)solver.minimize(x);
  x = x.cwiseAbs().cwiseMax(1e-6);
  return {shape, unpacked(x, guess, shape),
          residuals.at(x).norm() / std::sqrt(static_cast<double>(3 * points.f.size()))};
}

}  // namespace

Result<LineFit> fit_line(const Network& measured, double length_m, std::string_view label,
                         std::optional<double> top_hz) {
  const std::string place(label);
  const auto fail = [&](std::string message) {
    return failure<LineFit>(error_at(place, 0, std::move(message)));
  };
  if (measured.num_ports() != 2) {
    return fail("found " + std::to_string(measured.num_ports()) + " ports; wanted two");
  }
  if (measured.reference_ohm[0] != measured.reference_ohm[1] ||
      measured.reference_ohm[0].imag() != 0) {
    return fail("the references of the two ports differ or are complex; wanted one real one");
  }
  if (!(std::isfinite(length_m) && length_m > 0)) {
    return fail("found a length of " + exact(length_m) + " m; wanted one above 0");
  }
  const FrequencyResponse s21{measured.frequencies_hz, measured.parameter(1, 0)};
  const Result<Eigen::VectorXcd> usable = interpolate(s21, Eigen::VectorXd(0), label);
  if (!usable) return {std::nullopt, usable.notes};

  // The band: as told, or while the launches are good.
  const Eigen::VectorXd& f = measured.frequencies_hz;
  const Eigen::VectorXd reflection =
      measured.parameter(0, 0).cwiseAbs().cwiseMax(measured.parameter(1, 1).cwiseAbs());
  std::vector<Eigen::Index> used;
  for (Eigen::Index k = 0; k < f.size(); ++k) {
    if (f[k] <= 0) continue;
    if (top_hz ? f[k] > *top_hz : reflection[k] > amplitude_db_to_ratio(-15)) break;
    used.push_back(k);
  }
  if (used.size() < 16) {
    return fail("found " + std::to_string(used.size()) + " points " +
                (top_hz ? "up to " + significant(hz_to_ghz(*top_hz), 4) + " GHz"
                        : "before the reflection passes -15 dB") +
                "; wanted at least 16 for a fit");
  }
  const auto stride = static_cast<Eigen::Index>(used.size() - 1) / kMostPoints + 1;
  Points points;
  points.reference_ohm = measured.reference_ohm[0].real();
  const Eigen::Index count = (static_cast<Eigen::Index>(used.size()) - 1) / stride + 1;
  points.f.resize(count);
  points.s.resize(count, 3);
  for (Eigen::Index i = 0; i < count; ++i) {
    const Eigen::Index k = used[static_cast<std::size_t>(i * stride)];
    points.f[i] = f[k];
    points.s.row(i) << measured.values(0, k), measured.values(1, k), measured.values(3, k);
  }

  // A first guess from delay and from the loss at the top, shared between the two laws.
  LineFit guess;
  guess.length_m = length_m;
  guess.top_hz = f[used.back()];
  const double delay_s = bulk_delay_s({f.head(used.back() + 1), s21.values.head(used.back() + 1)});
  const double loss_np =
      std::max(1e-3, -std::log(s21.values.segment(used.back() - 7, 8).cwiseAbs().mean()));
  guess.model = {0.0, 0.5 * loss_np / std::sqrt(guess.top_hz) / length_m,
                 0.5 * loss_np / guess.top_hz / length_m, std::max(delay_s, 1e-12) / length_m,
                 points.reference_ohm};

  std::vector<Trial> trials;
  const auto try_from = [&](const LineFit& start, const Shape& shape) {
    Trial trial = tried(points, start, shape);
    if (!trials.empty() && trials.back().shape == shape) {
      if (trial.residual < trials.back().residual) trials.back() = std::move(trial);
    } else {
      trials.push_back(std::move(trial));
    }
  };
  for (const bool dispersion : {false, true}) try_from(guess, {dispersion, false});
  for (const bool dispersion : {false, true}) {
    if (trials[1].residual < 1e-6) break;  // nothing is left for ends to explain
    // Reflections make several valleys: start on both sides of the reference, and with several
    // shares of the delay in each end.
    for (const double z : {0.93, 1.07}) {
      for (const double share : {0.02, 0.06, 0.12}) {
        LineFit start = guess;
        start.ends = EndSection{points.reference_ohm, share * delay_s};
        start.model.tau_s_per_m *= 1 - 2 * share;
        start.model.z_c_ohm *= z;
        try_from(start, {dispersion, true});
      }
    }
  }
  const double best =
      std::min_element(trials.begin(), trials.end(), [](const auto& a, const auto& b) {
        return a.residual < b.residual;
      })->residual;
  // Rounding and the data's own digits leave 1e-9 at best; below that all are equal.
  const auto chosen = std::find_if(trials.begin(), trials.end(), [&](const Trial& trial) {
    return trial.residual <= 1.25 * best + 1e-9;
  });
  LineFit fit = chosen->fit;
  const Eigen::MatrixXcd model = parameters(fit, length_m, points.f, points.reference_ohm);
  const auto n = static_cast<double>(count);
  fit.residual_s21 = (model.col(1) - points.s.col(1)).norm() / std::sqrt(n);
  fit.residual_s11 = std::sqrt(((model.col(0) - points.s.col(0)).squaredNorm() +
                                (model.col(2) - points.s.col(2)).squaredNorm()) /
                               (2 * n));
  fit.residual_db = std::sqrt(
      (20 * (points.s.col(1).array() / model.col(1).array()).abs().log10()).square().mean());
  return {std::move(fit), usable.notes};
}

Network predicted_network(const LineFit& fit, double length_m,
                          const Eigen::VectorXd& frequencies_hz, double reference_ohm) {
  Network out = line_network(fit.model, length_m, frequencies_hz, reference_ohm);
  const Eigen::MatrixXcd s = parameters(fit, length_m, frequencies_hz, reference_ohm);
  for (Eigen::Index k = 0; k < frequencies_hz.size(); ++k) {
    out.values.col(k) << s(k, 0), s(k, 1), s(k, 1), s(k, 2);
  }
  return out;
}

}  // namespace tapwright
