#include "tapwright/eye/bounds.hpp"

#include <Eigen/Cholesky>
#include <boost/math/special_functions/gamma.hpp>
#include <cmath>
#include <stdexcept>

#include "eye/instant.hpp"
#include "tapwright/base/fft.hpp"

namespace tapwright {
namespace {

/// |X_k|^2 summed over k = k0, k0 + num_folded, ...: a real record's spectrum folded to one period.
Eigen::VectorXd folded_energy(const Eigen::VectorXd& samples, Eigen::Index num_folded) {
  const Eigen::VectorXcd half = real_spectrum(samples);
  const Eigen::Index n = samples.size();
  Eigen::VectorXd folded = Eigen::VectorXd::Zero(num_folded);
  for (Eigen::Index k = 0; k < n; ++k) {
    folded[k % num_folded] += std::norm(half[k < half.size() ? k : n - k]);
  }
  return folded;
}

}  // namespace

EqualizerBounds bounds_of_folded_spectrum(const Eigen::VectorXd& folded) {
  if (folded.size() == 0 || !folded.allFinite() || folded.minCoeff() < 0.0) {
    throw std::invalid_argument(
        "bounds_of_folded_spectrum: wanted at least one value, all finite and >= 0");
  }
  EqualizerBounds bounds;
  const Eigen::ArrayXd s = folded.array();
  bounds.matched_filter = s.mean();
  bounds.linear = 1.0 / (1.0 + s).inverse().mean() - 1.0;
  bounds.feedback = std::exp(s.log1p().mean()) - 1.0;
  if (s.minCoeff() > 0.0) {
    bounds.zero_forcing_linear = 1.0 / s.inverse().mean();
    bounds.zero_forcing_feedback = std::exp(s.log().mean());
  }
  return bounds;
}

std::optional<EqualizerBounds> equalizer_bounds(const EyeModel& model, std::size_t swing_index) {
  const Link& link = model.link;
  const auto& density = link.device.receiver.noise_density_v2_per_hz;
  if (!density || !(*density > 0.0) || link.channel.at_slicer) return std::nullopt;
  const double amplitude_v = link.device.transmitter.swings.at(swing_index).value;
  // P(f) = dt X; 1/T is as many bins of the record as it has UI.
  const PulseResponse& p = model.input;
  const double scale = 2.0 * symbol_variance(link.signal.levels) / (*density * p.ui_s()) *
                       std::pow(amplitude_v * p.dt_s(), 2);
  return bounds_of_folded_spectrum(scale *
                                   folded_energy(p.samples_v(), p.size() / p.samples_per_ui()));
}

EqualizerBounds discrete_bounds(const Eigen::VectorXd& p, double symbol_variance, double noise_v2) {
  if (p.size() == 0 || !(noise_v2 > 0.0)) {
    throw std::invalid_argument("discrete_bounds: wanted a channel and noise > 0");
  }
  // The means over frequency converge faster than any power of the number of points.
  const Eigen::Index size = quick_transform_size(std::max<Eigen::Index>(8192, 16 * p.size()));
  Eigen::VectorXd padded = Eigen::VectorXd::Zero(size);
  padded.head(p.size()) = p;
  return bounds_of_folded_spectrum(symbol_variance / noise_v2 * folded_energy(padded, size));
}

FiniteEqualizer finite_mmse(const Eigen::VectorXd& p, int num_forward, int num_feedback, int delay,
                            double symbol_variance, double noise_v2) {
  const Eigen::Index num_symbols = p.size() + num_forward - 1;
  if (p.size() == 0 || num_forward < 1 || num_feedback < 0 || delay < 0 || delay >= num_symbols ||
      !(symbol_variance > 0.0) || !(noise_v2 > 0.0)) {
    throw std::invalid_argument(
        "finite_mmse: wanted a channel, at least one forward tap, a delay within the response, and "
        "symbol variance and noise > 0");
  }
  // y_{k-j} = sum_n p_n a_{k-j-n} + noise: row j of H over the symbols a_k, a_{k-1}, ...
  Eigen::MatrixXd h = Eigen::MatrixXd::Zero(num_forward, num_symbols);
  for (int j = 0; j < num_forward; ++j) h.row(j).segment(j, p.size()) = p.transpose();
  // Fed-back symbols are known and taken off: their columns drop out.
  Eigen::MatrixXd left = h;
  const Eigen::Index fed_back = std::min<Eigen::Index>(num_feedback, num_symbols - 1 - delay);
  left.middleCols(delay + 1, fed_back).setZero();
  const Eigen::MatrixXd covariance = symbol_variance * left * left.transpose() +
                                     noise_v2 * Eigen::MatrixXd::Identity(num_forward, num_forward);
  FiniteEqualizer equalizer;
  equalizer.forward = covariance.ldlt().solve(symbol_variance * h.col(delay));
  equalizer.feedback = Eigen::VectorXd::Zero(num_feedback);
  equalizer.feedback.head(fed_back) =
      h.middleCols(delay + 1, fed_back).transpose() * equalizer.forward;
  equalizer.mean_square_error = symbol_variance * (1.0 - equalizer.forward.dot(h.col(delay)));
  equalizer.unbiased_ratio = symbol_variance / equalizer.mean_square_error - 1.0;
  return equalizer;
}

double signal_to_distortion(const EyeModel& model, const Settings& settings) {
  require_fit(model, settings);
  const PlacedEye eye = place_eye(model, place_of(settings));
  const Instant instant = instant_of(eye, eye.phases.front(), settings.fir, settings.dfe_v);
  const Disturbance d = disturbance_of(eye, instant, aggressors_at_error_ratio(eye, settings.fir));
  const double variance = symbol_variance(d.levels);
  const double distortion_v2 =
      d.sigma_v * d.sigma_v + variance * d.symbols_v.squaredNorm() + d.binary_v.squaredNorm();
  return variance * instant.main_v() * instant.main_v() / distortion_v2;
}

double bits_to_prove(double error_ratio, double confidence, int errors) {
  if (!(error_ratio > 0.0 && error_ratio < 1.0) || !(confidence > 0.0 && confidence < 1.0) ||
      errors < 0) {
    throw std::invalid_argument(
        "bits_to_prove: wanted error ratio and confidence in (0, 1) and errors >= 0");
  }
  // P(at most n errors | mean m) = Q(n + 1, m), the regularised upper incomplete gamma function.
  return boost::math::gamma_q_inv(errors + 1.0, 1.0 - confidence) / error_ratio;
}

}  // namespace tapwright
