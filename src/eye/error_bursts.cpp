#include "tapwright/eye/error_bursts.hpp"

#include <algorithm>
#include <cmath>
#include <stdexcept>
#include <string>
#include <vector>

#include "eye/instant.hpp"

namespace tapwright {
namespace {

constexpr Eigen::Index kNodes = 513;
constexpr double kLeastLog = -700.0;  // ln of what still is a double

double checked(double probability) {
  if (!(probability >= 0.0 && probability <= 1.0)) {
    throw std::invalid_argument("error_bursts: exceedance gave " + std::to_string(probability) +
                                ", which is no probability");
  }
  return probability;
}

// P(disturbance > main_v - move) for every move of the threshold.
std::vector<double> tail_at(const std::function<double(double)>& exceedance, double main_v,
                            const std::vector<double>& move_v) {
  std::vector<double> nodes_v = move_v;
  std::sort(nodes_v.begin(), nodes_v.end());
  nodes_v.erase(std::unique(nodes_v.begin(), nodes_v.end()), nodes_v.end());
  if (static_cast<Eigen::Index>(nodes_v.size()) > kNodes) {
    const Eigen::VectorXd even =
        Eigen::VectorXd::LinSpaced(kNodes, nodes_v.front(), nodes_v.back());
    nodes_v.assign(even.begin(), even.end());
  }
  std::vector<double> log_p;
  for (const double node_v : nodes_v) {
    log_p.push_back(std::max(kLeastLog, std::log(checked(exceedance(main_v - node_v)))));
  }
  std::vector<double> out;
  for (const double v : move_v) {
    const auto above = std::lower_bound(nodes_v.begin(), nodes_v.end(), v);
    const auto i = std::min(static_cast<std::size_t>(above - nodes_v.begin()), nodes_v.size() - 1);
    if (i == 0 || nodes_v[i] == v) {
      out.push_back(std::exp(log_p[i]));
      continue;
    }
    const double share = (v - nodes_v[i - 1]) / (nodes_v[i] - nodes_v[i - 1]);
    out.push_back(std::exp((1.0 - share) * log_p[i - 1] + share * log_p[i]));
  }
  return out;
}

}  // namespace

ErrorBursts error_bursts(const std::function<double(double)>& exceedance, double main_v,
                         const Eigen::VectorXd& dfe_v, Eigen::Index max_length) {
  if (dfe_v.size() > kMostBurstTaps) {
    throw std::invalid_argument("error_bursts: " + std::to_string(dfe_v.size()) +
                                " DFE taps; bursts are counted for at most " +
                                std::to_string(kMostBurstTaps));
  }
  if (max_length < 1) throw std::invalid_argument("error_bursts: max_length must be >= 1");

  // A state is a number of n digits to base 3, the last decision in the lowest: 0 correct, 1 wrong
  // upward (decided +1), 2 wrong downward.
  std::size_t num_states = 1;
  for (Eigen::Index k = 0; k < dfe_v.size(); ++k) num_states *= 3;
  std::vector<double> move_v(num_states, 0.0);  // by which the feedback lowers the level
  std::size_t unit = 1;
  for (Eigen::Index k = 0; k < dfe_v.size(); ++k, unit *= 3) {
    for (std::size_t s = 0; s < num_states; ++s) {
      const std::size_t digit = s / unit % 3;
      if (digit != 0) move_v[s] += (digit == 1 ? 2.0 : -2.0) * dfe_v[k];
    }
  }
  // A +1 is pushed down by the move, a -1 by its negative: that of the state with digits 1 and 2
  // exchanged.
  std::vector<double> opposite_v(num_states);
  for (std::size_t s = 0; s < num_states; ++s) opposite_v[s] = -move_v[s];
  const std::vector<double> down = tail_at(exceedance, main_v, move_v);
  const std::vector<double> up = tail_at(exceedance, main_v, opposite_v);

  const auto next = [&](std::size_t state, std::size_t digit) {
    return num_states == 1 ? std::size_t{0} : (3 * state + digit) % num_states;
  };
  // P(nothing but correct decisions from here until the DFE has forgotten).
  std::vector<double> clears(num_states, 1.0);
  for (std::size_t s = 1; s < num_states; ++s) {
    for (std::size_t at = s; at != 0; at = next(at, 0))
      clears[s] *= 1.0 - 0.5 * (down[at] + up[at]);
  }

  ErrorBursts out;
  out.start_probability = checked(exceedance(main_v));
  out.length_probability = Eigen::VectorXd::Zero(max_length);
  if (num_states == 1) {
    out.length_probability[0] = 1.0;
    out.mean_length = out.mean_errors = 1.0;
    out.error_ratio = out.start_probability;
    return out;
  }
  std::vector<double> mass(num_states, 0.0);
  std::vector<double> moved(num_states);
  mass[next(0, 1)] = 0.5;
  mass[next(0, 2)] = 0.5;
  double alive = 1.0;
  constexpr Eigen::Index kMostSteps = 1 << 16;
  for (Eigen::Index length = 1; length <= kMostSteps && alive > 1e-15; ++length) {
    // States whose last decision is wrong: those whose lowest digit isn't 0.
    double ends = 0.0;
    for (std::size_t s = 0; s < num_states; ++s) {
      if (s % 3 == 0) continue;
      out.mean_errors += mass[s];
      ends += mass[s] * clears[s];
    }
    out.mean_length += static_cast<double>(length) * ends;
    if (length <= max_length) {
      out.length_probability[length - 1] = ends;
    } else {
      out.longer_probability += ends;
    }
    std::fill(moved.begin(), moved.end(), 0.0);
    for (std::size_t s = 1; s < num_states; ++s) {
      if (mass[s] == 0.0) continue;
      moved[next(s, 2)] += 0.5 * mass[s] * down[s];
      moved[next(s, 1)] += 0.5 * mass[s] * up[s];
      moved[next(s, 0)] += mass[s] * (1.0 - 0.5 * (down[s] + up[s]));
    }
    std::swap(mass, moved);
    mass[0] = 0.0;  // forgotten: the burst is over
    alive = 0.0;
    for (const double m : mass) alive += m;
  }
  out.longer_probability += alive;
  out.error_ratio = std::min(0.5, out.start_probability * out.mean_errors);
  return out;
}

std::optional<ErrorBursts> error_bursts(const EyeModel& model, const Settings& settings,
                                        Eigen::Index max_length) {
  require_fit(model, settings);
  const DfeLimits& dfe = model.link.device.receiver.dfe;
  const Eigen::Index reach = dfe.empty() ? 0 : dfe.back().position;
  if (model.link.signal.levels != 2 || reach > kMostBurstTaps) return std::nullopt;
  Eigen::VectorXd dfe_v = Eigen::VectorXd::Zero(reach);
  for (std::size_t i = 0; i < dfe.size(); ++i) {
    dfe_v[dfe[i].position - 1] = settings.dfe_v[static_cast<Eigen::Index>(i)];
  }
  const PlacedEye eye = place_eye(model, place_of(settings));
  const LineCode code = code_of(model);
  const Instant instant = instant_of(eye, eye.phases.front(), settings.fir, settings.dfe_v);
  Tail tail(eye, code, instant, aggressors_at_error_ratio(eye, settings.fir));
  return error_bursts([&](double level_v) { return std::min(1.0, tail.exceedance(level_v)); },
                      instant.signal_v - model.link.device.receiver.sensitivity_v, dfe_v,
                      max_length);
}

}  // namespace tapwright
