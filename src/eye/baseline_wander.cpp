#include "tapwright/eye/baseline_wander.hpp"

#include <cmath>
#include <numbers>
#include <stdexcept>
#include <string>

#include "tapwright/eye/coded_distribution.hpp"
#include "tapwright/eye/coded_worst_case.hpp"

namespace tapwright {

BaselineWander baseline_wander(const LineCode& code, const Eigen::VectorXd& row,
                               Eigen::Index main_index, double corner_hz, double ui_s) {
  const double w = 2.0 * std::numbers::pi * corner_hz * ui_s;
  if (!(w >= 1e-6 && w <= 0.1)) {
    throw std::invalid_argument("baseline_wander: 2 pi corner_hz ui_s = " + std::to_string(w) +
                                ", but it must lie between 1e-6 and 0.1");
  }
  if (main_index < 0 || main_index >= row.size()) {
    throw std::invalid_argument("baseline_wander: main_index = " + std::to_string(main_index) +
                                ", but the row has " + std::to_string(row.size()) + " cursors");
  }
  BaselineWander out;
  const double decay = std::exp(-w);
  const auto after = static_cast<Eigen::Index>(std::ceil(-std::log(1e-4) / w));
  out.tail_v.resize(row.size() + after);
  double earlier = 0.0;  // sum over j < k of p_j decay^(k - j)
  for (Eigen::Index k = 0; k < out.tail_v.size(); ++k) {
    const double here = k < row.size() ? row[k] : 0.0;
    out.tail_v[k] = -w * (0.5 * here + earlier);
    earlier = decay * (earlier + here);
  }
  const CodedMoments moments = coded_moments(code, out.tail_v, main_index);
  out.mean_v = moments.mean_v;
  out.rms_v = moments.deviation_v;
  Eigen::VectorXd others_v = out.tail_v;
  others_v[main_index] = 0.0;
  out.worst_v = coded_peak_v(code, others_v);
  // Independent symbols see all of the tail: the rest is a geometric series.
  const double last = std::abs(out.tail_v[out.tail_v.size() - 1]);
  const double main = out.tail_v[main_index];
  const double levels = code.levels();
  const double variance = (levels + 1.0) / (3.0 * (levels - 1.0));
  out.worst_independent_v = out.tail_v.lpNorm<1>() - std::abs(main) + last * decay / (1.0 - decay);
  out.rms_independent_v =
      std::sqrt(variance * (out.tail_v.squaredNorm() - main * main +
                            last * last * decay * decay / (1.0 - decay * decay)));
  return out;
}

}  // namespace tapwright
