#include "problems.hpp"

#include <cmath>
#include <complex>
#include <numbers>

#include "tapwright/base/fft.hpp"
#include "tapwright/channel/touchstone.hpp"

namespace tapwright::bench {
namespace {

using Complex = std::complex<double>;
using std::numbers::pi;

constexpr double kRateBd = 10.3125e9;

/// exp(-gamma d) of the line, gamma = gamma1 sqrt(f) + gamma2 f with f in GHz and d in mm.
/// Source: IEEE 802.3 clause 92, Annex 93A (parameters from memory; here only a plausible line).
Complex line_transfer(double frequency_hz, double length_m) {
  if (frequency_hz == 0.0) return 1.0;
  const double f = frequency_hz * 1e-9;
  const Complex gamma1 = 4.114e-4 * Complex(1.0, 1.0);
  const Complex gamma2 =
      2.547e-4 * Complex(1.0, -2.0 / pi * std::log(f)) + Complex(0.0, 2.0 * pi * 6.191e-3);
  return std::exp(-(gamma1 * std::sqrt(f) + gamma2 * f) * length_m * 1e3);
}

ReceivedSpectrum line_spectrum(double length_m, int samples_per_ui, Eigen::Index num_ui,
                               double size) {
  ReceivedSpectrum spectrum;
  spectrum.ui_s = 1.0 / kRateBd;
  spectrum.samples_per_ui = samples_per_ui;
  spectrum.num_samples = num_ui * samples_per_ui;
  spectrum.values.resize(spectrum.num_samples / 2 + 1);
  for (Eigen::Index k = 0; k < spectrum.values.size(); ++k) {
    const double f = static_cast<double>(k) * spectrum.df_hz();
    const double x = pi * f * spectrum.ui_s;
    const Complex symbol =
        x == 0.0 ? Complex(1.0) : std::sin(x) / x * std::exp(Complex(0.0, -x));
    spectrum.values[k] = size * samples_per_ui * symbol * line_transfer(f, length_m);
  }
  spectrum.values[spectrum.values.size() - 1] = spectrum.values.tail(1)[0].real();
  return spectrum;
}

FirTap tap_of(int position, double min, double max, int num_codes) {
  FirTap tap{position, min, max, {}, false};
  for (int code = 0; code < num_codes; ++code) {
    tap.codes.push_back({code, min + (max - min) * code / (num_codes - 1)});
  }
  return tap;
}

}  // namespace

Link link_of(const Size& size) {
  Link link;
  link.name = "benchmark";
  link.signal.symbol_rate_bd = kRateBd;
  link.signal.levels = size.levels;
  link.signal.line_code.kind = size.line_code;
  const int num_pre = std::min(20, size.num_cursors / 4);
  link.signal.span_ui = {{num_pre, size.num_cursors - 1 - num_pre}};
  link.samples_per_ui = size.samples_per_ui;
  const Eigen::Index num_ui = quick_transform_size(size.num_cursors + 56);
  link.channel = line_spectrum(size.length_m, size.samples_per_ui, num_ui, 1.0);
  for (int i = 0; i < size.num_aggressors; ++i) {
    Aggressor aggressor;
    aggressor.name = "neighbour " + std::to_string(i + 1);
    aggressor.spectrum =
        line_spectrum(size.length_m * (1.1 + 0.1 * i), size.samples_per_ui, num_ui, 0.02);
    link.crosstalk.push_back(aggressor);
  }

  link.device.transmitter.swings = {{0, 0.5}};
  const int num_pre_taps = (size.num_fir - 1) / 2;
  for (int position = -num_pre_taps; position < size.num_fir - num_pre_taps; ++position) {
    if (position == 0) {
      link.device.transmitter.fir.taps.push_back(tap_of(0, 0.5, 1.0, size.codes_per_tap));
    } else {
      const double reach = position < 0 ? -0.25 / -position : -0.4 / position;
      link.device.transmitter.fir.taps.push_back(
          std::abs(position) == 1
              ? tap_of(position, reach, 0.0, size.codes_per_tap)
              : tap_of(position, reach / 2, -reach / 2, size.codes_per_tap));
    }
  }
  Receiver& receiver = link.device.receiver;
  receiver.bandwidth_hz = 0.75 * kRateBd;
  receiver.noise_rms_v = 1e-3;
  for (int i = 0; i < size.num_ctle; ++i) {
    CtleReference reference;
    reference.dc_gain_db = -12.0 * (i / 16) / std::max(1.0, (size.num_ctle - 1) / 16.0);
    reference.f_z_hz = reference.f_p1_hz = kRateBd / 4;
    reference.f_p2_hz = kRateBd;
    reference.low_frequency = CtleReference::LowFrequency{-0.2 * (i % 16), kRateBd / 40};
    receiver.ctle.push_back({i, std::to_string(i), reference, std::nullopt});
  }
  for (int k = 1; k <= size.num_dfe; ++k) {
    const double max_v = 0.05 / k;
    receiver.dfe.push_back(
        {k, max_v, false,
         size.dfe_step_v > 0.0 ? codes_from_step(-max_v, max_v, size.dfe_step_v)
                               : std::vector<Code>{}});
  }
  return link;
}

Disturbance disturbance_of(int num_cursors) {
  Disturbance disturbance;
  disturbance.symbols_v.resize(num_cursors);
  for (int k = 0; k < num_cursors; ++k) {
    disturbance.symbols_v[k] = 0.02 * std::exp(-0.05 * k) * std::cos(2.1 * k);
  }
  disturbance.sigma_v = 1e-3;
  return disturbance;
}

std::string touchstone_of(int num_ports, int num_points) {
  const Eigen::VectorXd frequencies_hz =
      Eigen::VectorXd::LinSpaced(num_points, 1e6, 1e6 * num_points);
  Network network =
      empty_network(frequencies_hz, Eigen::VectorXcd::Constant(num_ports, Complex(50.0)));
  const int half = num_ports / 2;
  for (Eigen::Index point = 0; point < num_points; ++point) {
    const Complex through = line_transfer(frequencies_hz[point], 0.2);
    for (int port = 0; port < num_ports; ++port) {
      for (int from = 0; from < num_ports; ++from) {
        const double sign = (port + from) % 2 == 0 ? 1.0 : -1.0;
        network.at(point)(port, from) =
            std::abs(port - from) == half ? through : sign * 1e-3 * through * through;
      }
    }
  }
  return write_touchstone(network);
}

}  // namespace tapwright::bench
