#pragma once
// A pulse or any other record in time, on the grid that all later rooms use.

#include <Eigen/Core>

namespace tapwright {

/// What the receiver sees when one symbol of level +1 is sent alone.
///
/// Shape:  samples_v is (n), n >= 1; entry i belongs to time i * dt_s().
/// Units:  volts and seconds; samples_per_ui counts samples in one symbol.
/// Errors: std::invalid_argument if samples_v is empty or holds a non-finite entry, if
///         samples_per_ui < 1, or if ui_s is not finite and > 0.
class PulseResponse {
 public:
  PulseResponse(Eigen::VectorXd samples_v, int samples_per_ui, double ui_s);

  [[nodiscard]] const Eigen::VectorXd& samples_v() const { return samples_v_; }
  [[nodiscard]] int samples_per_ui() const { return samples_per_ui_; }
  [[nodiscard]] double ui_s() const { return ui_s_; }
  [[nodiscard]] double dt_s() const { return ui_s_ / samples_per_ui_; }
  [[nodiscard]] Eigen::Index size() const { return samples_v_.size(); }
  /// Index of the largest sample; the first of several equals.
  [[nodiscard]] Eigen::Index peak_index() const { return peak_index_; }
  /// Sample at any index; 0 outside the record.
  [[nodiscard]] double at(Eigen::Index index) const {
    return index >= 0 && index < samples_v_.size() ? samples_v_[index] : 0.0;
  }

 private:
  Eigen::VectorXd samples_v_;
  int samples_per_ui_;
  double ui_s_;
  Eigen::Index peak_index_ = 0;
};

/// The cursors p(t_s + kT), k = -num_pre ... num_post, with t_s at `sample_index`; zero outside.
///
/// Shape: the result is (num_pre + num_post + 1); entry num_pre is the sample at t_s.
[[nodiscard]] Eigen::VectorXd cursors_at(const PulseResponse& pulse, Eigen::Index sample_index,
                                         int num_pre, int num_post);

/// Every sample times `factor`.
[[nodiscard]] PulseResponse scaled(const PulseResponse& pulse, double factor);

}  // namespace tapwright
