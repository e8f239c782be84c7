#pragma once
// Cascade, renormalisation and termination of networks.

#include <Eigen/Core>
#include <complex>
#include <optional>
#include <string_view>
#include <vector>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/channel/frequency_response.hpp"
#include "tapwright/channel/network.hpp"

namespace tapwright {

/// The same network in other reference impedances.
///
/// Shape:  reference_ohm is (n). Errors: std::invalid_argument on another size or a real part <= 0.
/// Source: Kurokawa, IEEE Trans. MTT 13(2), 1965 (power waves).
[[nodiscard]] Network renormalised(const Network& network, const Eigen::VectorXcd& reference_ohm);

/// The ports listed (1-based), in that order; the others end in their reference.
///
/// Errors: std::out_of_range for a port the network lacks.
[[nodiscard]] Network with_ports(const Network& network, const std::vector<int>& ports);

/// One after the other, the first nearest to the driver. Each is a 2N-port whose ports 1 ... N look
/// towards the driver, N+1 ... 2N towards the receiver; two-ports mostly. Where inner references
/// differ the later network is renormalised, which is exact.
///
/// Grids: equal grids are used as they are. Otherwise all are brought onto the finest grid over the
///        overlap by `resampled`, and a warning tells what range is left.
/// Errors: an empty list, port counts that differ or are odd, no overlap.
[[nodiscard]] Result<Network> cascade(const std::vector<Network>& networks, std::string_view label);

/// The network on another grid within its own range. The mean delay is taken out of every
/// parameter, the rest interpolated by a cubic spline in real and imaginary part, and the delay put
/// back; so anything under half a turn of phase between points is no obstacle.
///
/// Errors: std::invalid_argument when the new grid leaves the old range.
[[nodiscard]] Network resampled(const Network& network, const Eigen::VectorXd& frequencies_hz);

/// What a port ends in.
struct Termination {
  double resistance_ohm = 50.0;
  double capacitance_f = 0.0;  ///< in parallel to the resistance
  /// If given, used in place of the resistance; the capacitance stays in parallel.
  std::optional<std::complex<double>> impedance_ohm;

  [[nodiscard]] std::complex<double> at(double frequency_hz) const;
};

/// The network without the given port (1-based), which ends in the termination.
///
/// Errors: std::out_of_range for a port the network lacks, std::invalid_argument for a termination
///         that is no finite number or has a negative real part.
[[nodiscard]] Network with_port_ended(const Network& network, int port,
                                      const Termination& termination);

/// Mean delay of a transmission in seconds, from the phase steps between neighbouring points, each
/// weighted by the power it carries; right while a step turns less than half a turn. Ports count
/// from 0.
[[nodiscard]] double mean_delay_s(const Network& network, int to, int from);

/// Voltage across the load over half the voltage of the source's generator:
///
///     H = D s21 (1 - G1)(1 + G2) / (1 - s11 G1 - s22 G2 + G1 G2 (s11 s22 - s12 s21))
///
/// G1, G2 the source's and the load's reflection seen from the port's reference, times
/// sqrt(z2 / z1) where the references differ. D = 1 / (1 + j w R C) is the source's own divider,
/// its capacitance C standing behind its resistance (or impedance) R; 1 without capacitance.
///
/// Shape:  two_port has two ports.
/// Errors: std::invalid_argument otherwise, or if a termination is no finite number or has a
///         negative real part.
[[nodiscard]] FrequencyResponse terminated_response(const Network& two_port,
                                                    const Termination& source,
                                                    const Termination& load);

}  // namespace tapwright
