#include "tapwright/base/normal.hpp"

#include <boost/math/special_functions/erf.hpp>
#include <cmath>
#include <numbers>
#include <stdexcept>

namespace tapwright {

double gaussian_quantile_of_tail(double tail_probability) {
  if (!(tail_probability > 0.0 && tail_probability < 1.0)) {
    throw std::invalid_argument("gaussian_quantile_of_tail: the probability must lie in (0, 1)");
  }
  return std::numbers::sqrt2 * boost::math::erfc_inv(2.0 * tail_probability);
}

double gaussian_tail(double x) { return 0.5 * std::erfc(x / std::numbers::sqrt2); }

}  // namespace tapwright
