#pragma once
// Links made of a pulse given sample by sample, for tests of what comes after the channel.

#include <Eigen/Core>
#include <string>
#include <vector>

#include "tapwright/base/fft.hpp"
#include "tapwright/link/link.hpp"

namespace tapwright::test {

/// The spectrum of a record of whole UI; samples_v is the pulse at 1 V launch.
inline ReceivedSpectrum spectrum_of(Eigen::VectorXd samples_v, int samples_per_ui, double ui_s,
                                    bool at_slicer = true) {
  const Eigen::Index num_ui = (samples_v.size() + samples_per_ui - 1) / samples_per_ui;
  const Eigen::Index size = samples_v.size();
  samples_v.conservativeResize(num_ui * samples_per_ui);
  samples_v.tail(samples_v.size() - size).setZero();
  ReceivedSpectrum spectrum;
  spectrum.values = real_spectrum(samples_v);
  spectrum.num_samples = samples_v.size();
  spectrum.samples_per_ui = samples_per_ui;
  spectrum.ui_s = ui_s;
  spectrum.at_slicer = at_slicer;
  return spectrum;
}

/// A FIR tap without codes.
inline FirTap fir_tap(int position, double min, double max) {
  FirTap tap;
  tap.position = position;
  tap.min = min;
  tap.max = max;
  return tap;
}

/// 1 GBd, 2000 mVppd (+-1 V), main tap only, flat CTLE, no DFE, no noise; the whole record counts.
inline Link link_of_pulse(const Eigen::VectorXd& samples_v, int samples_per_ui) {
  Link link;
  link.name = "test";
  link.signal.symbol_rate_bd = 1e9;
  link.samples_per_ui = samples_per_ui;
  link.channel = spectrum_of(samples_v, samples_per_ui, link.signal.ui_s());
  const int num_ui = static_cast<int>(link.channel.num_samples / samples_per_ui) + 1;
  link.signal.span_ui = {num_ui, num_ui};
  link.device.transmitter.swings = {{0, 1.0}};
  link.device.transmitter.fir.taps = {fir_tap(0, 0.0, 1.0)};
  CtleState flat;
  flat.label = "flat";
  flat.response = CtleZerosPoles{};
  link.device.receiver.ctle = {flat};
  return link;
}

/// Main tap 1 and nothing else, at the peak.
inline Settings plain_settings(const Link& link) {
  Settings settings;
  settings.fir =
      Eigen::VectorXd::Zero(static_cast<Eigen::Index>(link.device.transmitter.fir.taps.size()));
  settings.fir[static_cast<Eigen::Index>(link.device.transmitter.fir.main_index())] = 1.0;
  settings.dfe_v =
      Eigen::VectorXd::Zero(static_cast<Eigen::Index>(link.device.receiver.dfe.size()));
  return settings;
}

}  // namespace tapwright::test
