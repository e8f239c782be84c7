#include "tapwright/channel/network_operations.hpp"

#include <Eigen/LU>
#include <algorithm>
#include <cmath>
#include <numbers>
#include <stdexcept>
#include <string>

#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

using Complex = std::complex<double>;
using Eigen::Index;
using Eigen::MatrixXcd;
using Eigen::VectorXcd;
using Eigen::VectorXd;

/// Second derivative, at x[i0], of the cubic through four points.
VectorXcd curvature_of_four(const VectorXd& x, const MatrixXcd& y, Index i0, Index step) {
  const Index i1 = i0 + step;
  const Index i2 = i1 + step;
  const Index i3 = i2 + step;
  const VectorXcd d01 = (y.col(i1) - y.col(i0)) / (x[i1] - x[i0]);
  const VectorXcd d12 = (y.col(i2) - y.col(i1)) / (x[i2] - x[i1]);
  const VectorXcd d23 = (y.col(i3) - y.col(i2)) / (x[i3] - x[i2]);
  const VectorXcd d012 = (d12 - d01) / (x[i2] - x[i0]);
  const VectorXcd d123 = (d23 - d12) / (x[i3] - x[i1]);
  const VectorXcd d0123 = (d123 - d012) / (x[i3] - x[i0]);
  return 2.0 * (d012 + d0123 * (2.0 * x[i0] - x[i1] - x[i2]));
}

/// Second derivatives of the cubic spline through (x, y), for several curves at once. At the ends
/// they are those of the cubic through the last four points, which keeps fourth order up to there;
/// with fewer points they are 0.
///
/// Shape: x is (n), n >= 2; y is (m, n), one curve a row; the result has y's shape.
MatrixXcd spline_curvature(const VectorXd& x, const MatrixXcd& y) {
  const Index n = x.size();
  MatrixXcd curvature = MatrixXcd::Zero(y.rows(), n);
  if (n < 3) return curvature;
  if (n > 3) {
    curvature.col(0) = curvature_of_four(x, y, 0, 1);
    curvature.col(n - 1) = curvature_of_four(x, y, n - 1, -1);
  }
  // Thomas algorithm on the inner points.
  VectorXd upper = VectorXd::Zero(n);
  for (Index i = 1; i + 1 < n; ++i) {
    const double left = x[i] - x[i - 1];
    const double right = x[i + 1] - x[i];
    const double pivot = 2.0 * (left + right) - left * upper[i - 1];
    upper[i] = right / pivot;
    curvature.col(i) =
        (6.0 * ((y.col(i + 1) - y.col(i)) / right - (y.col(i) - y.col(i - 1)) / left) -
         left * curvature.col(i - 1)) /
        pivot;
  }
  for (Index i = n - 2; i >= 1; --i) curvature.col(i) -= upper[i] * curvature.col(i + 1);
  return curvature;
}

/// Phase lag per step and its weight, summed over the transmissions that `wanted` picks.
template <class Wanted>
double mean_delay_of(const Network& network, Wanted wanted) {
  const int n = network.num_ports();
  double turned = 0.0;
  double weight = 0.0;
  for (Index k = 1; k < network.num_points(); ++k) {
    Complex sum = 0.0;
    for (int to = 0; to < n; ++to) {
      for (int from = 0; from < n; ++from) {
        if (wanted(to, from)) {
          sum += network.at(k)(to, from) * std::conj(network.at(k - 1)(to, from));
        }
      }
    }
    const double step = network.frequencies_hz[k] - network.frequencies_hz[k - 1];
    turned -= std::arg(sum) * std::abs(sum) * step;
    weight += std::abs(sum) * step * step;
  }
  return weight > 0.0 ? turned / (2.0 * std::numbers::pi * weight) : 0.0;
}

void check_termination(const Termination& termination) {
  const Complex z = termination.impedance_ohm.value_or(Complex(termination.resistance_ohm));
  if (!std::isfinite(z.real()) || !std::isfinite(z.imag()) || z.real() < 0.0 ||
      !std::isfinite(termination.capacitance_f) || termination.capacitance_f < 0.0) {
    throw std::invalid_argument(
        "a termination must be finite, with resistance and capacitance >= 0");
  }
}

/// Redheffer star product of two 2N-ports, inner references equal. Stays finite where nothing is
/// transmitted, unlike a product of transfer matrices.
MatrixXcd star(const MatrixXcd& a, const MatrixXcd& b) {
  const Index n = a.rows() / 2;
  const MatrixXcd a12 = a.topRightCorner(n, n);
  const MatrixXcd a21 = a.bottomLeftCorner(n, n);
  const MatrixXcd a22 = a.bottomRightCorner(n, n);
  const MatrixXcd b11 = b.topLeftCorner(n, n);
  const MatrixXcd b12 = b.topRightCorner(n, n);
  const MatrixXcd b21 = b.bottomLeftCorner(n, n);
  const MatrixXcd one = MatrixXcd::Identity(n, n);
  // Waves at the seam: x travels right, y left. x = a21 u + a22 y, y = b11 x + b12 v.
  const Eigen::PartialPivLU<MatrixXcd> rightward(one - a22 * b11);
  const MatrixXcd x_of_u = rightward.solve(a21);
  const MatrixXcd x_of_v = rightward.solve(a22 * b12);
  MatrixXcd s(2 * n, 2 * n);
  s.topLeftCorner(n, n) = a.topLeftCorner(n, n) + a12 * b11 * x_of_u;
  s.topRightCorner(n, n) = a12 * (b12 + b11 * x_of_v);
  s.bottomLeftCorner(n, n) = b21 * x_of_u;
  s.bottomRightCorner(n, n) = b.bottomRightCorner(n, n) + b21 * x_of_v;
  return s;
}

Network cascade_of_two(const Network& a, Network b) {
  const Index n = a.num_ports() / 2;
  VectorXcd inner = b.reference_ohm;
  inner.head(n) = a.reference_ohm.tail(n);
  // Waves join as voltages and currents do only in a real reference.
  Network left = a;
  if ((inner.head(n).imag().array() != 0.0).any()) {
    inner.head(n) = inner.head(n).real().cast<Complex>().eval();
    VectorXcd outer = a.reference_ohm;
    outer.tail(n) = inner.head(n);
    left = renormalised(a, outer);
  }
  if (inner != b.reference_ohm) b = renormalised(b, inner);
  VectorXcd reference(2 * n);
  reference << a.reference_ohm.head(n), b.reference_ohm.tail(n);
  Network joined = empty_network(a.frequencies_hz, reference);
  for (Index k = 0; k < joined.num_points(); ++k) {
    if (n == 1) {
      const auto p = left.at(k);
      const auto q = b.at(k);
      const Complex loop = 1.0 / (1.0 - p(1, 1) * q(0, 0));
      auto s = joined.at(k);
      s(0, 0) = p(0, 0) + p(0, 1) * q(0, 0) * p(1, 0) * loop;
      s(0, 1) = p(0, 1) * q(0, 1) * loop;
      s(1, 0) = p(1, 0) * q(1, 0) * loop;
      s(1, 1) = q(1, 1) + q(1, 0) * p(1, 1) * q(0, 1) * loop;
    } else {
      joined.at(k) = star(left.at(k), b.at(k));
    }
  }
  return joined;
}

std::string range_text(double low_hz, double high_hz) {
  return significant(hz_to_ghz(low_hz), 6) + " to " + significant(hz_to_ghz(high_hz), 6) + " GHz";
}

}  // namespace

Network renormalised(const Network& network, const VectorXcd& reference_ohm) {
  const Index n = network.num_ports();
  if (reference_ohm.size() != n) {
    throw std::invalid_argument("renormalised: one reference a port is needed");
  }
  for (const Complex& z : reference_ohm) {
    if (!(z.real() > 0.0) || !std::isfinite(z.real()) || !std::isfinite(z.imag())) {
      throw std::invalid_argument("renormalised: a reference needs a real part > 0");
    }
  }
  // a = (v + z i)/(2 sqrt(Re z)), b = (v - z* i)/(2 sqrt(Re z)) for old and new z: eliminating v
  // and i gives a' = D (a - P* b) ... with, per port,
  //   a' = alpha a + beta b,  b' = beta* a + alpha* b,
  //   alpha = (z* + z')/(2 sqrt(r r')), beta = (z - z')/(2 sqrt(r r')).
  const VectorXcd& z = network.reference_ohm;
  VectorXcd alpha(n);
  VectorXcd beta(n);
  for (Index i = 0; i < n; ++i) {
    const double scale = 2.0 * std::sqrt(z[i].real() * reference_ohm[i].real());
    alpha[i] = (std::conj(z[i]) + reference_ohm[i]) / scale;
    beta[i] = (z[i] - reference_ohm[i]) / scale;
  }
  Network result = empty_network(network.frequencies_hz, reference_ohm);
  const MatrixXcd from_a = alpha.asDiagonal();
  const MatrixXcd from_a_to_b = beta.conjugate().asDiagonal();
  for (Index k = 0; k < network.num_points(); ++k) {
    const MatrixXcd s = network.at(k);
    // S' = (beta* + alpha* S)(alpha + beta S)^-1, solved from the right.
    const MatrixXcd numerator = from_a_to_b + alpha.conjugate().asDiagonal() * s;
    const MatrixXcd denominator = from_a + beta.asDiagonal() * s;
    result.at(k) = denominator.transpose().partialPivLu().solve(numerator.transpose()).transpose();
  }
  return result;
}

Network with_ports(const Network& network, const std::vector<int>& ports) {
  const int n = network.num_ports();
  const auto count = static_cast<Index>(ports.size());
  VectorXcd reference(count);
  for (Index i = 0; i < count; ++i) {
    const int port = ports[static_cast<std::size_t>(i)];
    if (port < 1 || port > n) {
      throw std::out_of_range("with_ports: port " + std::to_string(port) + " of " +
                              std::to_string(n));
    }
    reference[i] = network.reference_ohm[port - 1];
  }
  Network result = empty_network(network.frequencies_hz, reference);
  for (Index j = 0; j < count; ++j) {
    for (Index i = 0; i < count; ++i) {
      const Index source = Index{ports[static_cast<std::size_t>(j)] - 1} * n +
                           (ports[static_cast<std::size_t>(i)] - 1);
      result.values.row(j * count + i) = network.values.row(source);
    }
  }
  return result;
}

Network resampled(const Network& network, const VectorXd& frequencies_hz) {
  const VectorXd& x = network.frequencies_hz;
  if (is_same_grid(x, frequencies_hz)) return network;
  if (frequencies_hz.size() == 0 || x.size() < 2 || frequencies_hz[0] < x[0] ||
      frequencies_hz[frequencies_hz.size() - 1] > x[x.size() - 1]) {
    throw std::invalid_argument("resampled: the new grid leaves the range of the old one");
  }
  const double delay_s = mean_delay_of(network, [](int to, int from) { return to != from; });
  const auto turn = [&](double frequency_hz) {
    return std::polar(1.0, 2.0 * std::numbers::pi * frequency_hz * delay_s);
  };
  MatrixXcd still = network.values;
  for (Index k = 0; k < x.size(); ++k) still.col(k) *= turn(x[k]);
  const MatrixXcd curvature = spline_curvature(x, still);
  Network result = empty_network(frequencies_hz, network.reference_ohm);
  Index i = 0;
  for (Index k = 0; k < frequencies_hz.size(); ++k) {
    const double f = frequencies_hz[k];
    while (i + 2 < x.size() && x[i + 1] < f) ++i;
    const double step = x[i + 1] - x[i];
    const double b = (f - x[i]) / step;
    const double a = 1.0 - b;
    result.values.col(k) =
        (a * still.col(i) + b * still.col(i + 1) +
         ((a * a * a - a) * curvature.col(i) + (b * b * b - b) * curvature.col(i + 1)) *
             (step * step / 6.0)) *
        std::conj(turn(f));
  }
  return result;
}

Result<Network> cascade(const std::vector<Network>& networks, std::string_view label) {
  const auto fail = [&](const std::string& message) {
    return failure<Network>(error_at(std::string(label), 0, message));
  };
  if (networks.empty()) return fail("found an empty cascade; wanted at least one network");
  const int ports = networks[0].num_ports();
  for (std::size_t i = 0; i < networks.size(); ++i) {
    if (networks[i].num_ports() != ports || ports % 2 != 0) {
      return fail("found a network with " + std::to_string(networks[i].num_ports()) +
                  " ports at position " + std::to_string(i + 1) +
                  " of the cascade; wanted the same even number everywhere");
    }
  }
  Result<Network> result;
  bool same_grid = true;
  double low = networks[0].frequencies_hz[0];
  double high = networks[0].frequencies_hz[networks[0].num_points() - 1];
  for (const Network& network : networks) {
    same_grid = same_grid && is_same_grid(network.frequencies_hz, networks[0].frequencies_hz);
    low = std::max(low, network.frequencies_hz[0]);
    high = std::min(high, network.frequencies_hz[network.num_points() - 1]);
  }
  if (same_grid) {
    Network joined = networks[0];
    for (std::size_t i = 1; i < networks.size(); ++i) joined = cascade_of_two(joined, networks[i]);
    result.value = std::move(joined);
    return result;
  }
  // The grid with most points inside the overlap is the finest there.
  const auto inside = [&](const Network& network) {
    const VectorXd& f = network.frequencies_hz;
    const double* const first = std::lower_bound(f.data(), f.data() + f.size(), low);
    const double* const last = std::upper_bound(f.data(), f.data() + f.size(), high);
    return std::pair<Index, Index>(first - f.data(), std::max<Index>(last - first, 0));
  };
  std::size_t finest = 0;
  for (std::size_t i = 1; i < networks.size(); ++i) {
    if (inside(networks[i]).second > inside(networks[finest]).second) finest = i;
  }
  const auto [begin, count] = inside(networks[finest]);
  if (!(low < high) || count < 2) {
    return fail("found frequency ranges without a common part; the highest start is " +
                significant(hz_to_ghz(low), 6) + " GHz, the lowest end " +
                significant(hz_to_ghz(high), 6) + " GHz");
  }
  const VectorXd grid = networks[finest].frequencies_hz.segment(begin, count);
  std::optional<Network> joined;
  for (const Network& network : networks) {
    if (network.num_points() < 2) return fail("found a network of one point; wanted at least two");
    Network brought = resampled(network, grid);
    joined = joined ? cascade_of_two(*joined, std::move(brought)) : std::move(brought);
  }
  result.value = std::move(joined);
  result.notes.push_back(warning_at(std::string(label), 0,
                                    "the frequency grids differ; all were interpolated onto " +
                                        std::to_string(count) + " points from " +
                                        range_text(grid[0], grid[count - 1])));
  return result;
}

Complex Termination::at(double frequency_hz) const {
  const Complex z = impedance_ohm.value_or(Complex(resistance_ohm, 0.0));
  if (capacitance_f == 0.0) return z;
  return z / (1.0 + Complex(0.0, 2.0 * std::numbers::pi * frequency_hz * capacitance_f) * z);
}

double mean_delay_s(const Network& network, int to, int from) {
  return mean_delay_of(network, [=](int i, int j) { return i == to && j == from; });
}

Network with_port_ended(const Network& network, int port, const Termination& termination) {
  const int n = network.num_ports();
  if (port < 1 || port > n) {
    throw std::out_of_range("with_port_ended: port " + std::to_string(port) + " of " +
                            std::to_string(n));
  }
  check_termination(termination);
  std::vector<int> others;
  for (int i = 1; i <= n; ++i) {
    if (i != port) others.push_back(i);
  }
  Network result = with_ports(network, others);
  const Index p = port - 1;
  const Complex z = network.reference_ohm[p];
  for (Index k = 0; k < network.num_points(); ++k) {
    const Complex ends = termination.at(network.frequencies_hz[k]);
    const Complex reflection = (ends - z) / (ends + std::conj(z));
    const auto s = network.at(k);
    auto left = result.at(k);
    const Complex loop = reflection / (1.0 - reflection * s(p, p));
    for (Index j = 0; j + 1 < n; ++j) {
      for (Index i = 0; i + 1 < n; ++i) {
        left(i, j) += s(others[static_cast<std::size_t>(i)] - 1, p) * loop *
                      s(p, others[static_cast<std::size_t>(j)] - 1);
      }
    }
  }
  return result;
}

FrequencyResponse terminated_response(const Network& two_port, const Termination& source,
                                      const Termination& load) {
  if (two_port.num_ports() != 2) {
    throw std::invalid_argument("terminated_response: found " +
                                std::to_string(two_port.num_ports()) + " ports, wanted 2");
  }
  check_termination(source);
  check_termination(load);
  const bool real = (two_port.reference_ohm.imag().array() == 0.0).all();
  const Network network =
      real ? two_port : renormalised(two_port, two_port.reference_ohm.real().cast<Complex>());
  const double z1 = network.reference_ohm[0].real();
  const double z2 = network.reference_ohm[1].real();
  const double scale = std::sqrt(z2 / z1);
  FrequencyResponse response{network.frequencies_hz, VectorXcd(network.num_points())};
  for (Index k = 0; k < network.num_points(); ++k) {
    const auto s = network.at(k);
    const double f = network.frequencies_hz[k];
    const Complex zs = source.at(f);  // behind its generator, its capacitance across the port
    const Complex zl = load.at(f);
    const Complex g1 = (zs - z1) / (zs + z1);
    const Complex g2 = (zl - z2) / (zl + z2);
    const Complex denominator =
        1.0 - s(0, 0) * g1 - s(1, 1) * g2 + g1 * g2 * (s(0, 0) * s(1, 1) - s(0, 1) * s(1, 0));
    // The source's capacitance also divides what its resistance passes: the voltage that it would
    // show open is smaller than that of its generator.
    const Complex generator_ohm = source.impedance_ohm.value_or(Complex(source.resistance_ohm));
    const Complex divider =
        source.capacitance_f == 0.0 || generator_ohm == 0.0 ? 1.0 : zs / generator_ohm;
    response.values[k] = scale * divider * s(1, 0) * (1.0 - g1) * (1.0 + g2) / denominator;
  }
  return response;
}

}  // namespace tapwright
