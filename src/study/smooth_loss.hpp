#pragma once
// A channel's loss without its ripples, and more of it.

#include "tapwright/channel/received_spectrum.hpp"

namespace tapwright {

/// ln|H| = -(constant + by_sqrt sqrt(x) + by_f x), x = f / (half the symbol rate). Units: nepers.
struct SmoothLoss {
  double constant = 0.0;
  double by_sqrt = 0.0;
  double by_f = 0.0;
};

/// Least squares over the spectrum from one hundredth to three quarters of the symbol rate, after
/// taking off the symbol's own sin(x)/x.
[[nodiscard]] SmoothLoss smooth_loss(const ReceivedSpectrum& spectrum);

/// The spectrum after that much more loss, causal: the square-root part turns the phase by as much
/// as it takes, the linear part by 2/pi ln of the frequency.
///
/// Source: the propagation constant of IEEE 802.3 Annex 93A.
[[nodiscard]] ReceivedSpectrum with_more_loss(ReceivedSpectrum spectrum, const SmoothLoss& more);

}  // namespace tapwright
