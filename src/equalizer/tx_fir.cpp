#include "tapwright/equalizer/tx_fir.hpp"

#include <algorithm>
#include <cmath>
#include <stdexcept>
#include <string>

namespace tapwright {
namespace {

long long nano(double value) { return std::llround(value * 1e9); }

void require_size(const FirLimits& limits, const Eigen::VectorXd& taps) {
  if (taps.size() != static_cast<Eigen::Index>(limits.taps.size())) {
    throw std::invalid_argument("tx_fir: found " + std::to_string(taps.size()) + " tap values for " +
                                std::to_string(limits.taps.size()) + " taps");
  }
}

}  // namespace

std::size_t FirLimits::main_index() const {
  const auto main = std::find_if(taps.begin(), taps.end(),
                                 [](const FirTap& tap) { return tap.position == 0; });
  if (main == taps.end()) throw std::invalid_argument("FirLimits: no tap at position 0");
  return static_cast<std::size_t>(main - taps.begin());
}

bool keeps_limits(const FirLimits& limits, const Eigen::VectorXd& taps) {
  require_size(limits, taps);
  double sum = 0.0;
  for (std::size_t i = 0; i < limits.taps.size(); ++i) {
    const FirTap& tap = limits.taps[i];
    const long long value = nano(taps[static_cast<Eigen::Index>(i)]);
    sum += std::abs(taps[static_cast<Eigen::Index>(i)]);
    if (tap.codes.empty()) {
      if (value < nano(tap.min) || value > nano(tap.max)) return false;
    } else if (std::none_of(tap.codes.begin(), tap.codes.end(),
                            [&](const Code& c) { return nano(c.value) == value; })) {
      return false;
    }
    if (tap.position == 0 && limits.min_main && value < nano(*limits.min_main)) return false;
  }
  return nano(sum) <= nano(limits.peak_limit);
}

Eigen::VectorXd with_remainder(const FirLimits& limits, Eigen::VectorXd taps) {
  require_size(limits, taps);
  for (std::size_t i = 0; i < limits.taps.size(); ++i) {
    if (!limits.taps[i].is_remainder) continue;
    const auto at = static_cast<Eigen::Index>(i);
    taps[at] = limits.peak_limit - (taps.lpNorm<1>() - std::abs(taps[at]));
  }
  return taps;
}

FilteredPulse apply(const FirLimits& limits, const Eigen::VectorXd& taps,
                    const PulseResponse& pulse) {
  require_size(limits, taps);
  const Eigen::Index per_ui = pulse.samples_per_ui();
  const Eigen::Index first = std::min(0, limits.taps.front().position) * per_ui;
  const Eigen::Index last = std::max(0, limits.taps.back().position) * per_ui;
  Eigen::VectorXd out = Eigen::VectorXd::Zero(pulse.size() + last - first);
  for (std::size_t i = 0; i < limits.taps.size(); ++i) {
    out.segment(limits.taps[i].position * per_ui - first, pulse.size()) +=
        taps[static_cast<Eigen::Index>(i)] * pulse.samples_v();
  }
  return {PulseResponse(std::move(out), pulse.samples_per_ui(), pulse.ui_s()), -first};
}

CursorRow apply(const FirLimits& limits, const Eigen::VectorXd& taps, const CursorRow& p) {
  require_size(limits, taps);
  const Eigen::Index first = std::min(0, limits.taps.front().position);
  const Eigen::Index last = std::max(0, limits.taps.back().position);
  CursorRow q{Eigen::VectorXd::Zero(p.values.size() + last - first), p.main_index - first};
  for (std::size_t i = 0; i < limits.taps.size(); ++i) {
    q.values.segment(limits.taps[i].position - first, p.values.size()) +=
        taps[static_cast<Eigen::Index>(i)] * p.values;
  }
  return q;
}

}  // namespace tapwright
