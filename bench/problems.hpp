#pragma once
// The problems that benchmarks work on: made from numbers alone, so that every run has the same.

#include <Eigen/Core>
#include <string>

#include "tapwright/eye/distribution.hpp"
#include "tapwright/link/link.hpp"

namespace tapwright::bench {

struct Size {
  int num_fir = 3;       ///< one or more pre-cursor taps, the main one, post-cursor taps
  int codes_per_tap = 64;
  int num_ctle = 256;
  int num_dfe = 5;
  int num_cursors = 200;
  int samples_per_ui = 32;
  double dfe_step_v = 0.0;  ///< 0 = unquantised
  int num_aggressors = 0;
  int levels = 2;
  LineCodeKind line_code = LineCodeKind::kNone;
  double length_m = 0.5;  ///< of the line, which makes the eye more or less open
};

/// A backplane-like line at 10.3125 GBd with a receiver of the given size: skin effect and dielectric
/// loss of the line of IEEE 802.3 clause 92's host board, matched ends.
[[nodiscard]] Link link_of(const Size& size);

/// `num_cursors` decaying cursors of both signs and Gaussian noise of 1 mV.
[[nodiscard]] Disturbance disturbance_of(int num_cursors);

/// Touchstone text of that line as an n-port of n/2 uncoupled lines.
[[nodiscard]] std::string touchstone_of(int num_ports, int num_points);

}  // namespace tapwright::bench
