#pragma once
// Real transforms of a whole record; a thin coat over Eigen's FFT module.

#include <Eigen/Core>
#include <memory>

namespace tapwright {

/// X_k = sum_n x_n exp(-2 pi i k n / N), k = 0 ... N/2.
///
/// Shape: x is (n), n >= 1; the result is (n / 2 + 1).
[[nodiscard]] Eigen::VectorXcd real_spectrum(const Eigen::VectorXd& x);

/// Inverse of `real_spectrum` (with the 1/N) for a record of n samples.
///
/// Shape: spectrum is (n / 2 + 1). Errors: std::invalid_argument on any other size.
[[nodiscard]] Eigen::VectorXd real_record(const Eigen::VectorXcd& spectrum, Eigen::Index n);

/// The same inverse for many records of one length: factors are computed once. For one thread.
///
/// Errors: as real_record, thrown by the call whose argument is at fault.
class RecordTransform {
 public:
  explicit RecordTransform(Eigen::Index n);
  ~RecordTransform();
  RecordTransform(const RecordTransform&) = delete;
  RecordTransform& operator=(const RecordTransform&) = delete;
  [[nodiscard]] Eigen::VectorXd record(const Eigen::VectorXcd& spectrum);

 private:
  struct Plan;
  Eigen::Index n_;
  std::unique_ptr<Plan> plan_;
};

/// The least integer >= n of the form 2^a 3^b 5^c, for which transforms are quick.
[[nodiscard]] Eigen::Index quick_transform_size(Eigen::Index n);

}  // namespace tapwright
