#include "tapwright/channel/pulse_response.hpp"

#include <algorithm>
#include <cmath>
#include <stdexcept>
#include <string>

namespace tapwright {

PulseResponse::PulseResponse(Eigen::VectorXd samples_v, int samples_per_ui, double ui_s)
    : samples_v_(std::move(samples_v)), samples_per_ui_(samples_per_ui), ui_s_(ui_s) {
  if (samples_v_.size() == 0) throw std::invalid_argument("PulseResponse: samples_v is empty");
  for (Eigen::Index i = 0; i < samples_v_.size(); ++i) {
    if (!std::isfinite(samples_v_[i])) {
      throw std::invalid_argument("PulseResponse: samples_v[" + std::to_string(i) +
                                  "] must be finite");
    }
  }
  if (samples_per_ui_ < 1)
    throw std::invalid_argument("PulseResponse: samples_per_ui must be >= 1");
  if (!(std::isfinite(ui_s_) && ui_s_ > 0.0)) {
    throw std::invalid_argument("PulseResponse: ui_s must be finite and > 0");
  }
  // In two passes: the first one runs at memory speed, the second is short.
  const double peak_v = samples_v_.maxCoeff();
  peak_index_ = std::find(samples_v_.begin(), samples_v_.end(), peak_v) - samples_v_.begin();
}

Eigen::VectorXd cursors_at(const PulseResponse& pulse, Eigen::Index sample_index, int num_pre,
                           int num_post) {
  Eigen::VectorXd cursors(num_pre + num_post + 1);
  for (int k = -num_pre; k <= num_post; ++k) {
    cursors[k + num_pre] = pulse.at(sample_index + Eigen::Index{k} * pulse.samples_per_ui());
  }
  return cursors;
}

PulseResponse scaled(const PulseResponse& pulse, double factor) {
  return {pulse.samples_v() * factor, pulse.samples_per_ui(), pulse.ui_s()};
}

}  // namespace tapwright
