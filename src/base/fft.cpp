#include "tapwright/base/fft.hpp"

#include <complex>
#include <numbers>
#include <stdexcept>
#include <unsupported/Eigen/FFT>

namespace tapwright {

Eigen::VectorXcd real_spectrum(const Eigen::VectorXd& x) {
  Eigen::FFT<double> fft;
  fft.SetFlag(Eigen::FFT<double>::HalfSpectrum);
  Eigen::VectorXcd spectrum(x.size() / 2 + 1);
  if (x.size() == 1) {
    spectrum[0] = x[0];
    return spectrum;
  }
  fft.fwd(spectrum, x);
  return spectrum;
}

struct RecordTransform::Plan {
  Eigen::FFT<double> fft;   // keeps its twiddle factors from call to call
  Eigen::VectorXcd turns;   // exp(2 pi i k / n), k = 0 ... n/2 - 1, for even n
  Eigen::VectorXcd folded;  // n/2 for even n, otherwise n
  Eigen::VectorXcd unfolded;
};

RecordTransform::RecordTransform(Eigen::Index n) : n_(n), plan_(std::make_unique<Plan>()) {
  if (n < 1) throw std::invalid_argument("RecordTransform: a record needs at least one sample");
  const Eigen::Index length = n % 2 == 0 ? n / 2 : n;
  plan_->folded.resize(length);
  plan_->unfolded.resize(length);
  if (n % 2 != 0) return;
  plan_->turns.resize(length);
  for (Eigen::Index k = 0; k < length; ++k) {
    plan_->turns[k] =
        std::polar(1.0, 2.0 * std::numbers::pi * static_cast<double>(k) / static_cast<double>(n));
  }
}
RecordTransform::~RecordTransform() = default;

Eigen::VectorXd RecordTransform::record(const Eigen::VectorXcd& spectrum) {
  if (spectrum.size() != n_ / 2 + 1) {
    throw std::invalid_argument("real_record: a record of n samples has a spectrum of n/2 + 1");
  }
  Eigen::VectorXcd& folded = plan_->folded;
  if (n_ == 1) return Eigen::VectorXd::Constant(1, spectrum[0].real());
  if (n_ % 2 != 0) {
    folded.head(spectrum.size()) = spectrum;
    folded[0] = spectrum[0].real();
    for (Eigen::Index k = spectrum.size(); k < n_; ++k) folded[k] = std::conj(spectrum[n_ - k]);
    plan_->fft.inv(plan_->unfolded, folded);
    return plan_->unfolded.real();
  }
  // Even and odd samples as real and imaginary part of one record of half the length:
  // Z_k = (X_k + X*_{n/2-k}) / 2 + i e^{2 pi i k / n} (X_k - X*_{n/2-k}) / 2.
  const Eigen::Index half = n_ / 2;
  const double mean = spectrum[0].real();
  const double alternating = spectrum[half].real();
  folded[0] = {0.5 * (mean + alternating), 0.5 * (mean - alternating)};
  for (Eigen::Index k = 1; k < half; ++k) {
    const std::complex<double> a = spectrum[k];
    const std::complex<double> b = std::conj(spectrum[half - k]);
    const std::complex<double> difference = a - b;
    const std::complex<double> turn = plan_->turns[k];
    // i * turn * difference, written out: a complex product otherwise looks after infinities.
    const double re = turn.real() * difference.real() - turn.imag() * difference.imag();
    const double im = turn.real() * difference.imag() + turn.imag() * difference.real();
    folded[k] = {0.5 * (a.real() + b.real() - im), 0.5 * (a.imag() + b.imag() + re)};
  }
  if (half == 1) plan_->unfolded = folded;
  else plan_->fft.inv(plan_->unfolded, folded);
  Eigen::VectorXd samples(n_);
  for (Eigen::Index k = 0; k < half; ++k) {
    samples[2 * k] = plan_->unfolded[k].real();
    samples[2 * k + 1] = plan_->unfolded[k].imag();
  }
  return samples;
}

Eigen::VectorXd real_record(const Eigen::VectorXcd& spectrum, Eigen::Index n) {
  if (n < 1 || spectrum.size() != n / 2 + 1) {
    throw std::invalid_argument("real_record: a record of n samples has a spectrum of n/2 + 1");
  }
  return RecordTransform(n).record(spectrum);
}

Eigen::Index quick_transform_size(Eigen::Index n) {
  for (Eigen::Index size = n;; ++size) {
    Eigen::Index rest = size;
    for (const Eigen::Index prime : {2, 3, 5}) {
      while (rest > 1 && rest % prime == 0) rest /= prime;
    }
    if (rest <= 1) return size;
  }
}

}  // namespace tapwright
