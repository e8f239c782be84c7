#include "study/smooth_loss.hpp"

#include <Eigen/Dense>
#include <cmath>
#include <complex>
#include <numbers>

namespace tapwright {
namespace {

double share_of_half_rate(const ReceivedSpectrum& spectrum, Eigen::Index k) {
  return static_cast<double>(k) * spectrum.df_hz() * 2.0 * spectrum.ui_s;
}

}  // namespace

SmoothLoss smooth_loss(const ReceivedSpectrum& spectrum) {
  // Normal equations: a few thousand points, three unknowns of like size.
  Eigen::Matrix3d a = Eigen::Matrix3d::Zero();
  Eigen::Vector3d b = Eigen::Vector3d::Zero();
  for (Eigen::Index k = 1; k < spectrum.values.size(); ++k) {
    const double x = share_of_half_rate(spectrum, k);
    if (x < 0.02) continue;
    if (x > 1.5) break;
    const double angle = std::numbers::pi * 0.5 * x;
    const double symbol = std::sin(angle) / angle * spectrum.samples_per_ui;
    const double magnitude = std::abs(spectrum.values[k]) / symbol;
    if (!(magnitude > 0.0)) continue;
    const Eigen::Vector3d row(1.0, std::sqrt(x), x);
    a += row * row.transpose();
    b -= row * std::log(magnitude);
  }
  const Eigen::Vector3d fit = a.ldlt().solve(b);
  return fit.allFinite() ? SmoothLoss{fit[0], fit[1], fit[2]} : SmoothLoss{};
}

ReceivedSpectrum with_more_loss(ReceivedSpectrum spectrum, const SmoothLoss& more) {
  for (Eigen::Index k = 0; k < spectrum.values.size(); ++k) {
    const double x = share_of_half_rate(spectrum, k);
    const double root = more.by_sqrt * std::sqrt(x);
    const double linear = more.by_f * x;
    const double turn = x > 0.0 ? root - linear * 2.0 / std::numbers::pi * std::log(x) : 0.0;
    spectrum.values[k] *= std::polar(std::exp(-(more.constant + root + linear)), -turn);
  }
  // The last entry of an even record belongs to both signs of its frequency and must be real.
  if (spectrum.num_samples % 2 == 0) {
    spectrum.values.tail(1)[0] = spectrum.values.tail(1)[0].real();
  }
  return spectrum;
}

}  // namespace tapwright
