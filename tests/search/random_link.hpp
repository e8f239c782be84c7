#pragma once
// Seeded links for checks against enumeration and HiGHS: short invented pulses, every kind of limit.

#include <algorithm>
#include <cmath>
#include <random>
#include <string>
#include <vector>

#include "tapwright/eye/eye_model.hpp"

namespace tapwright::test {

struct LinkShape {
  int num_fir = 3;          ///< one pre-cursor up to 4 taps, two from 5
  int num_dfe = 2;
  int levels = 2;
  int samples_per_ui = 2;
  int num_states = 2;
  int num_swings = 1;
  int num_codes = 0;        ///< per FIR tap; 0 = real values
  bool relative_dfe = false;
  int dfe_codes = 0;        ///< per DFE tap, either side of 0; 0 = real values
  bool remainder = false;   ///< the main tap is the remainder
  bool straddle = false;    ///< side taps of both signs
  bool uneven_codes = false;
  double noise_v = 0.0;
  int num_aggressors = 0;
};

/// A uniform number in [lo, hi); the same on every standard library.
inline double uniform(std::mt19937_64& random, double lo, double hi) {
  return lo + (hi - lo) * static_cast<double>(random() >> 11) * 0x1p-53;
}

inline PulseResponse random_pulse(std::mt19937_64& random, int samples_per_ui, double peak_v,
                                  double isi) {
  const int num_ui = 14;
  const int peak = 4 * samples_per_ui;
  Eigen::VectorXd v = Eigen::VectorXd::Zero(num_ui * samples_per_ui);
  for (Eigen::Index i = 0; i < v.size(); ++i) {
    const double ui = static_cast<double>(i - peak) / samples_per_ui;
    const double envelope = ui < 0 ? std::exp(1.6 * ui) : std::exp(-0.55 * ui);
    v[i] = peak_v * (i == peak ? 1.0 : isi * envelope * uniform(random, -0.6, 1.0));
  }
  return {std::move(v), samples_per_ui, 1e-10};
}

inline EyeModel random_model(std::mt19937_64& random, const LinkShape& shape) {
  EyeModel model{Link{}, {}, random_pulse(random, shape.samples_per_ui, 1.0, 0.5),
                 {3, 8}, 0.0, "as given", {}};
  Link& link = model.link;
  link.name = "random";
  link.signal.symbol_rate_bd = 1e10;
  link.signal.levels = shape.levels;
  link.samples_per_ui = shape.samples_per_ui;
  Device& device = link.device;
  for (int s = 0; s < shape.num_swings; ++s) {
    device.transmitter.swings.push_back({s, 0.25 + 0.15 * s});
  }
  const int num_pre = shape.num_fir >= 5 ? 2 : (shape.num_fir >= 2 ? 1 : 0);
  for (int i = 0; i < shape.num_fir; ++i) {
    FirTap tap;
    tap.position = i - num_pre;
    const bool main = tap.position == 0;
    tap.min = main ? 0.4 : -0.3;
    tap.max = main ? 1.0 : (shape.straddle ? 0.15 : 0.0);
    tap.is_remainder = main && shape.remainder;
    if (!tap.is_remainder && shape.num_codes > 0) {
      for (int k = 0; k < shape.num_codes; ++k) {
        double value = tap.min + (tap.max - tap.min) * k / (shape.num_codes - 1.0);
        if (shape.uneven_codes) value += uniform(random, 0.0, 0.3) * 0.1 / shape.num_codes;
        tap.codes.push_back({k, std::round(value * 1e6) * 1e-6});
      }
      tap.min = tap.codes.front().value;
      tap.max = tap.codes.back().value;
    }
    if (tap.is_remainder) tap.min = 0.3;
    device.transmitter.fir.taps.push_back(std::move(tap));
  }
  for (int k = 1; k <= shape.num_dfe; ++k) {
    DfeTap tap;
    tap.position = k;
    tap.relative = shape.relative_dfe;
    tap.max = uniform(random, 0.01, 0.1) * (shape.relative_dfe ? 2.0 : 0.4);
    if (shape.dfe_codes > 0) {
      for (int c = -shape.dfe_codes; c <= shape.dfe_codes; ++c) {
        tap.codes.push_back({c, tap.max * c / shape.dfe_codes});
      }
    }
    device.receiver.dfe.push_back(std::move(tap));
  }
  for (int s = 0; s < shape.num_states; ++s) {
    device.receiver.ctle.push_back({s, std::to_string(s), CtleReference{}, std::nullopt});
    StatePulses pulses{random_pulse(random, shape.samples_per_ui, uniform(random, 0.4, 1.0), 0.5),
                       {},
                       shape.noise_v};
    for (int a = 0; a < shape.num_aggressors; ++a) {
      pulses.aggressors.push_back(random_pulse(random, shape.samples_per_ui, 0.02, 0.9));
    }
    model.states.push_back(std::move(pulses));
  }
  for (int a = 0; a < shape.num_aggressors; ++a) link.crosstalk.emplace_back();
  return model;
}

}  // namespace tapwright::test
