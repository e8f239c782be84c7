#include "tapwright/eye/baseline_wander.hpp"

#include <cmath>
#include <numbers>
#include <stdexcept>
#include <string>

#include "eye/instant.hpp"
#include "tapwright/eye/coded_distribution.hpp"
#include "tapwright/eye/coded_worst_case.hpp"

namespace tapwright {
namespace {

bool in_range(double w) { return w >= 1e-6 && w <= 0.1; }

}  // namespace

BaselineWander baseline_wander(const LineCode& code, const Eigen::VectorXd& row,
                               Eigen::Index main_index, double corner_hz, double ui_s) {
  const double w = 2.0 * std::numbers::pi * corner_hz * ui_s;
  if (!in_range(w)) {
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

std::optional<BaselineWander> baseline_wander(const EyeModel& model, const Settings& settings) {
  require_fit(model, settings);
  const Link& link = model.link;
  const double ui_s = link.signal.ui_s();
  if (!link.high_pass_hz || !in_range(2.0 * std::numbers::pi * *link.high_pass_hz * ui_s)) {
    return std::nullopt;
  }
  const PlacedEye eye = place_eye(model, place_of(settings));
  const Instant instant = instant_of(eye, eye.phases.front(), settings.fir,
                                     Eigen::VectorXd::Zero(settings.dfe_v.size()));
  return baseline_wander(code_of(model), instant.residual.values, instant.residual.main_index,
                         *link.high_pass_hz, ui_s);
}

}  // namespace tapwright
