#pragma once
// A transfer function over frequency.

#include <Eigen/Core>

namespace tapwright {

/// Shape: both members are (n); frequencies_hz rises and is >= 0.
struct FrequencyResponse {
  Eigen::VectorXd frequencies_hz;
  Eigen::VectorXcd values;
  bool ac_coupled = false;  ///< nothing passes at DC: the response falls to 0 there
};

}  // namespace tapwright
