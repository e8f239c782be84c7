#include "tapwright/base/fft.hpp"

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

Eigen::VectorXd real_record(const Eigen::VectorXcd& spectrum, Eigen::Index n) {
  if (n < 1 || spectrum.size() != n / 2 + 1) {
    throw std::invalid_argument("real_record: a record of n samples has a spectrum of n/2 + 1");
  }
  if (n == 1) return Eigen::VectorXd::Constant(1, spectrum[0].real());
  Eigen::FFT<double> fft;
  // The half-spectrum inverse of Eigen's default back end is right for n divisible by 4 only;
  // the full spectrum works for every n.
  Eigen::VectorXcd full(n);
  full.head(spectrum.size()) = spectrum;
  full[0] = spectrum[0].real();
  if (n % 2 == 0) full[n / 2] = spectrum[n / 2].real();
  for (Eigen::Index k = spectrum.size(); k < n; ++k) full[k] = std::conj(spectrum[n - k]);
  Eigen::VectorXcd record(n);
  fft.inv(record, full);
  return record.real();
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
