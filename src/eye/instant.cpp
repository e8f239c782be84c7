#include "eye/instant.hpp"

#include <algorithm>
#include <cmath>
#include <limits>
#include <stdexcept>
#include <string>

#include "tapwright/eye/coded_worst_case.hpp"

namespace tapwright {

Place place_of(const Settings& settings) {
  return {settings.swing_index, settings.ctle_index, settings.phase_samples};
}

void require_fit(const EyeModel& model, const Settings& settings) {
  const Device& device = model.link.device;
  const auto require = [](bool fits, const char* what, std::size_t found, std::size_t wanted) {
    if (fits) return;
    throw std::invalid_argument(std::string("settings: found ") + what + " " +
                                std::to_string(found) + ", wanted " + std::to_string(wanted));
  };
  const auto num_fir = static_cast<std::size_t>(settings.fir.size());
  const auto num_dfe = static_cast<std::size_t>(settings.dfe_v.size());
  require(num_fir == device.transmitter.fir.taps.size(), "number of FIR taps", num_fir,
          device.transmitter.fir.taps.size());
  require(num_dfe == device.receiver.dfe.size(), "number of DFE taps", num_dfe,
          device.receiver.dfe.size());
}

double Instant::sigma_v() const {
  return std::sqrt(sigma_receiver_v * sigma_receiver_v + sigma_transmitter_v * sigma_transmitter_v +
                   sigma_jitter_v * sigma_jitter_v);
}

double Instant::isi_v() const {
  return residual.values.lpNorm<1>() - std::abs(main_v()) + beyond_dfe_v.lpNorm<1>();
}

Instant instant_of(const PlacedEye& eye, const CursorMap& map, const Eigen::VectorXd& fir,
                   const Eigen::VectorXd& dfe_v) {
  const Link& link = eye.model->link;
  Instant instant;
  instant.residual = {map.cursors * fir, map.main_index};
  std::vector<double> beyond;
  for (std::size_t i = 0; i < map.dfe_rows.size(); ++i) {
    const double d = dfe_v[static_cast<Eigen::Index>(i)];
    if (map.dfe_rows[i] >= 0) {
      instant.residual.values[map.dfe_rows[i]] -= d;
    } else {
      beyond.push_back(-d);
    }
  }
  instant.beyond_dfe_v =
      Eigen::Map<const Eigen::VectorXd>(beyond.data(), static_cast<Eigen::Index>(beyond.size()));
  instant.signal_v = instant.main_v() * signal_share(link.signal);
  instant.sigma_receiver_v = eye.receiver_noise_v;
  instant.sigma_transmitter_v = eye.transmitter_noise_ratio * std::abs(instant.main_v());
  if (map.jitter.size() > 0) {
    instant.slope = map.jitter * fir;
    instant.sigma_jitter_v = link.jitter.random_ui *
                             std::sqrt(symbol_variance(link.signal.levels)) * instant.slope.norm();
  }
  return instant;
}

Eigen::VectorXd aggressors_at_error_ratio(const PlacedEye& eye, const Eigen::VectorXd& fir) {
  Eigen::VectorXd all;
  for (std::size_t i = 0; i < eye.model->link.crosstalk.size(); ++i) {
    const Eigen::VectorXd x =
        aggressor_cursors(eye, i, fir, AggressorPhase::kLargestVariance).values_v;
    all.conservativeResize(all.size() + x.size());
    all.tail(x.size()) = x;
  }
  return all;
}

LineCode code_of(const EyeModel& model) {
  return LineCode::from(model.link.signal.line_code, model.link.signal.levels);
}

double coded_isi_v(const LineCode& code, const Instant& instant) {
  if (code.independent()) return instant.isi_v();
  // A DFE tap beyond the span meets a symbol that the row does not reach: count it as independent.
  CodedIsi isi(code, instant.residual.values.size(), instant.residual.main_index);
  return isi.worst(instant.residual.values) +
         instant.beyond_dfe_v.lpNorm<1>();
}

Eigen::Index mask_reach(const EyeModel& model) {
  return static_cast<Eigen::Index>(
      std::floor(model.link.mask_width_ui / 2.0 * model.input.samples_per_ui() + 1e-9));
}

Disturbance disturbance_of(const PlacedEye& eye, const Instant& instant,
                           const Eigen::VectorXd& aggressors_v) {
  const Link& link = eye.model->link;
  const Eigen::VectorXd& r = instant.residual.values;
  const Eigen::Index main = instant.residual.main_index;
  const Eigen::Index post = r.size() - 1 - main;
  Disturbance d;
  d.levels = link.signal.levels;
  d.sigma_v = instant.sigma_v();
  d.symbols_v.resize(r.size() - 1 + instant.beyond_dfe_v.size() + aggressors_v.size());
  d.symbols_v << r.head(main), r.tail(post), instant.beyond_dfe_v, aggressors_v;
  if (instant.slope.size() > 0) d.binary_v = link.jitter.dual_dirac_peak_ui * instant.slope;
  return d;
}

Disturbance with_least_noise(Disturbance disturbance) {
  const double variance_v2 =
      symbol_variance(disturbance.levels) * disturbance.symbols_v.squaredNorm() +
      disturbance.binary_v.squaredNorm();
  disturbance.sigma_v = std::max(disturbance.sigma_v, 0.008 * std::sqrt(variance_v2));
  return disturbance;
}

Tail::Tail(const PlacedEye& eye, const LineCode& code, const Instant& instant,
           const Eigen::VectorXd& aggressors_v, bool many_times) {
  if (code.independent()) {
    independent_ = disturbance_of(eye, instant, aggressors_v);
    if (many_times) independent_ = with_least_noise(std::move(independent_));
    return;
  }
  // Without the cursors: what does not follow the code.
  Instant others = instant;
  others.residual = {Eigen::VectorXd::Zero(1), 0};
  coded_.emplace(code, CodedDisturbance{instant.residual.values, instant.residual.main_index,
                                        disturbance_of(eye, others, aggressors_v)});
}

double Tail::exceeded_level_v(double probability) {
  return coded_ ? coded_->exceeded_level_v(probability)
                : tapwright::exceeded_level_v(independent_, probability);
}

double Tail::exceedance(double level_v) {
  return coded_ ? coded_->exceedance(level_v) : tapwright::exceedance(independent_, level_v);
}

AtErrorRatio at_error_ratio(const PlacedEye& eye, const LineCode& code, Eigen::Index offset_samples,
                            const Eigen::VectorXd& fir, const Eigen::VectorXd& dfe_v,
                            const Eigen::VectorXd& aggressors_v) {
  const EyeModel& model = *eye.model;
  const double probability = model.link.target.error_ratio;
  const double sensitivity_v = model.link.device.receiver.sensitivity_v;
  const int per_ui = model.input.samples_per_ui();
  const double clock_samples =
      per_ui >= kLeastSamplesPerUi ? model.link.jitter.common_random_ui * per_ui : 0.0;
  const auto instant_at = [&](double offset) {
    return instant_of(eye, cursor_map(model, eye.place, offset, eye.amplitude_v), fir, dfe_v);
  };
  const Instant here = instant_at(static_cast<double>(offset_samples));
  if (clock_samples == 0.0) {
    const double noise_v = Tail(eye, code, here, aggressors_v).exceeded_level_v(probability);
    return {noise_v, 2.0 * (here.signal_v - noise_v - sensitivity_v)};
  }

  // Clock jitter moves signal and interference together: the error ratio is averaged over phase out
  // to +-8 sigma, half a sigma apart (the trapezoid rule on a Gaussian is exact to 1e-17 there),
  // and the half height h is where sum w_i P(X_i > s_i - h) = P.
  struct Node {
    double weight = 0.0;
    double signal_v = 0.0;
    Tail tail;
    double at_high = 0.0;
  };
  constexpr double kReach = 8.0;
  constexpr int kPerSigma = 2;
  constexpr int kNumSide = static_cast<int>(kReach) * kPerSigma;
  double total = 0.0;
  for (int i = -kNumSide; i <= kNumSide; ++i) {
    total += std::exp(-0.5 * i * i / (kPerSigma * kPerSigma));
  }
  std::vector<Node> nodes;
  // No node alone may bring P, and one of them brings P over their number: a bracket.
  constexpr int kNumNodes = 2 * kNumSide + 1;
  double low = std::numeric_limits<double>::infinity();
  double high = low;
  for (int i = -kNumSide; i <= kNumSide; ++i) {
    const double sigmas = static_cast<double>(i) / kPerSigma;
    const double weight = std::exp(-0.5 * sigmas * sigmas) / total;
    const Instant there = instant_at(static_cast<double>(offset_samples) + sigmas * clock_samples);
    nodes.push_back({weight, there.signal_v, Tail(eye, code, there, aggressors_v, true)});
    const auto clear_v = [&](double share) {
      return there.signal_v - nodes.back().tail.exceeded_level_v(share);
    };
    // From 1/2 on the level is on the other side of the middle; a node that may always fail does
    // not bound from above, and its own signal bounds from below.
    if (probability / weight < 0.5) high = std::min(high, clear_v(probability / weight));
    const double share = probability / (weight * kNumNodes);
    low = std::min(low, share < 0.5 ? clear_v(share) : there.signal_v);
  }
  const auto error_ratio = [&](double at_v) {
    double sum = 0.0;
    for (Node& node : nodes) {
      node.at_high = node.weight * node.tail.exceedance(node.signal_v - at_v);
      sum += node.at_high;
    }
    return sum;
  };
  double log_high = std::log(error_ratio(high) / probability);
  std::erase_if(nodes, [&](const Node& node) { return node.at_high < 1e-6 * probability; });
  double log_low = std::log(error_ratio(low) / probability);
  // Regula falsi on ln P, nearly straight; the end that stays is halved (Illinois).
  double half_v = low;
  for (int i = 0; i < 60 && high - low > 1e-9 + 1e-7 * std::abs(high); ++i) {
    const double next = std::clamp(low - log_low * (high - low) / (log_high - log_low),
                                   low + 0.01 * (high - low), high - 0.01 * (high - low));
    const double log_next = std::log(error_ratio(next) / probability);
    half_v = next;
    if (std::abs(log_next) < 1e-6) break;
    if (log_next > 0.0) {
      high = next;
      log_high = log_next;
      log_low *= 0.5;
    } else {
      low = next;
      log_low = log_next;
      log_high *= 0.5;
    }
  }
  return {here.signal_v - half_v, 2.0 * (half_v - sensitivity_v)};
}

double worst_case_height_at(const PlacedEye& eye, const LineCode& code, const CursorMap& map,
                            const Eigen::VectorXd& fir, const Eigen::VectorXd& dfe_v) {
  const Link& link = eye.model->link;
  const Instant instant = instant_of(eye, map, fir, dfe_v);
  const double dual_dirac_v = link.jitter.dual_dirac_peak_ui * instant.slope.lpNorm<1>();
  return 2.0 * (instant.signal_v - coded_isi_v(code, instant) - dual_dirac_v -
                eye.quantile * instant.sigma_v() - link.device.receiver.sensitivity_v);
}

double coded_worst_case_height_v(const PlacedEye& eye, const LineCode& code,
                                 const Eigen::VectorXd& fir, const Eigen::VectorXd& dfe_v) {
  if (code.independent()) return worst_case_height_v(eye, fir.data(), dfe_v.data());
  double height_v = worst_case_height_at(eye, code, eye.phases.front(), fir, dfe_v);
  for (std::size_t i = 1; i < eye.phases.size(); ++i) {
    height_v = std::min(height_v, worst_case_height_at(eye, code, eye.phases[i], fir, dfe_v));
  }
  return height_v - 2.0 * crosstalk_peak(eye, fir).worst_v;
}

double at_error_ratio_height_v(const PlacedEye& eye, const LineCode& code,
                               const Eigen::VectorXd& fir, const Eigen::VectorXd& dfe_v) {
  const Eigen::VectorXd aggressors_v = aggressors_at_error_ratio(eye, fir);
  const auto height_at = [&](Eigen::Index offset) {
    return at_error_ratio(eye, code, offset, fir, dfe_v, aggressors_v).height_v;
  };
  double height_v = height_at(0);
  const Eigen::Index reach = mask_reach(*eye.model);
  for (Eigen::Index offset = 1; offset <= reach; ++offset) {
    height_v = std::min({height_v, height_at(-offset), height_at(offset)});
  }
  return height_v;
}

}  // namespace tapwright
