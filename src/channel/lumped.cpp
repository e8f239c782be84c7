#include "tapwright/channel/lumped.hpp"

#include <Eigen/LU>
#include <Eigen/SVD>
#include <algorithm>
#include <cmath>
#include <numbers>
#include <stdexcept>
#include <string>

#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/channel/network_operations.hpp"

namespace tapwright {
namespace {

using Complex = std::complex<double>;
using Eigen::Index;
using Eigen::MatrixXcd;
using Eigen::VectorXd;

template <class... Cases>
struct Overloaded : Cases... {
  using Cases::operator()...;
};
template <class... Cases>
Overloaded(Cases...) -> Overloaded<Cases...>;

/// S of a series impedance; none = an open line.
Eigen::Matrix2cd series_scattering(std::optional<Complex> z, double reference_ohm) {
  if (!z) return Eigen::Matrix2cd::Identity();
  const Complex sum = *z + 2.0 * reference_ohm;
  const Complex back = *z / sum;
  const Complex on = 2.0 * reference_ohm / sum;
  return Eigen::Matrix2cd{{back, on}, {on, back}};
}

/// S of a shunt admittance; none = a short.
Eigen::Matrix2cd shunt_scattering(std::optional<Complex> y, double reference_ohm) {
  if (!y) return -Eigen::Matrix2cd::Identity();
  const Complex sum = 2.0 + *y * reference_ohm;
  const Complex back = -*y * reference_ohm / sum;
  const Complex on = 2.0 / sum;
  return Eigen::Matrix2cd{{back, on}, {on, back}};
}

template <class Scattering>
Network from_points(const VectorXd& frequencies_hz, double reference_ohm, Scattering scattering) {
  Network network =
      empty_network(frequencies_hz, Eigen::Vector2cd::Constant(Complex(reference_ohm)));
  for (Index k = 0; k < frequencies_hz.size(); ++k) {
    network.at(k) = scattering(2.0 * std::numbers::pi * frequencies_hz[k]);
  }
  return network;
}

/// The section as a line of 1 m; its loss alone goes with sqrt(f), causally.
AnnexLine line_of(const LineSection& section) {
  AnnexLine line;
  line.a1_sqrt_s_per_m =
      section.loss_db_at_1_ghz / ratio_to_amplitude_db(std::numbers::e) / std::sqrt(1e9);
  line.tau_s_per_m = section.delay_s;
  line.z_c_ohm = section.impedance_ohm;
  return line;
}

Network element_network(const Element& element, const VectorXd& frequencies_hz,
                        double reference_ohm) {
  return std::visit(
      Overloaded{[&](const SeriesElement& part) {
                   return from_points(frequencies_hz, reference_ohm, [&](double w) {
                     std::optional<Complex> z = Complex(part.resistance_ohm, w * part.inductance_h);
                     if (part.capacitance_f && w == 0.0) {
                       z.reset();
                     } else if (part.capacitance_f) {
                       *z += 1.0 / Complex(0.0, w * *part.capacitance_f);
                     }
                     return series_scattering(z, reference_ohm);
                   });
                 },
                 [&](const ShuntElement& part) {
                   return from_points(frequencies_hz, reference_ohm, [&](double w) {
                     std::optional<Complex> y = Complex(0.0, w * part.capacitance_f);
                     if (part.resistance_ohm) *y += 1.0 / *part.resistance_ohm;
                     if (part.inductance_h && w == 0.0) {
                       y.reset();
                     } else if (part.inductance_h) {
                       *y += 1.0 / Complex(0.0, w * *part.inductance_h);
                     }
                     return shunt_scattering(y, reference_ohm);
                   });
                 },
                 [&](const LineSection& part) {
                   return line_network(line_of(part), 1.0, frequencies_hz, reference_ohm);
                 },
                 [&](const ModelSection& part) {
                   return line_network(part.model, part.length_m, frequencies_hz, reference_ohm);
                 }},
      element);
}

/// Transfer blocks [b1; a1] = T [a2; b2] of a 2N-port.
MatrixXcd transfer_of(const MatrixXcd& s) {
  const Index n = s.rows() / 2;
  const Eigen::PartialPivLU<MatrixXcd> s21(s.bottomLeftCorner(n, n));
  const MatrixXcd one = s21.solve(MatrixXcd::Identity(n, n));
  const MatrixXcd back = s21.solve(s.bottomRightCorner(n, n));
  MatrixXcd t(2 * n, 2 * n);
  t.topLeftCorner(n, n) = s.topRightCorner(n, n) - s.topLeftCorner(n, n) * back;
  t.topRightCorner(n, n) = s.topLeftCorner(n, n) * one;
  t.bottomLeftCorner(n, n) = -back;
  t.bottomRightCorner(n, n) = one;
  return t;
}

MatrixXcd scattering_of_transfer(const MatrixXcd& t) {
  const Index n = t.rows() / 2;
  const Eigen::PartialPivLU<MatrixXcd> t22(t.bottomRightCorner(n, n));
  const MatrixXcd one = t22.solve(MatrixXcd::Identity(n, n));
  const MatrixXcd back = t22.solve(t.bottomLeftCorner(n, n));
  MatrixXcd s(2 * n, 2 * n);
  s.topLeftCorner(n, n) = t.topRightCorner(n, n) * one;
  s.topRightCorner(n, n) = t.topLeftCorner(n, n) - t.topRightCorner(n, n) * back;
  s.bottomLeftCorner(n, n) = one;
  s.bottomRightCorner(n, n) = -back;
  return s;
}

}  // namespace

std::vector<Diagnostic> check_ladder(const Ladder& ladder, std::string_view label) {
  std::vector<Diagnostic> notes;
  for (std::size_t i = 0; i < ladder.size(); ++i) {
    const std::string place = "element " + std::to_string(i + 1) + ": ";
    const auto want = [&](std::string_view name, double value, bool zero_allowed) {
      if (std::isfinite(value) && (zero_allowed ? value >= 0.0 : value > 0.0)) return;
      notes.push_back(error_at(std::string(label), 0,
                               place + "found " + std::string(name) + " " + exact(value) +
                                   (zero_allowed ? "; wanted >= 0" : "; wanted > 0")));
    };
    std::visit(Overloaded{[&](const SeriesElement& part) {
                            want("resistance", part.resistance_ohm, true);
                            want("inductance", part.inductance_h, true);
                            if (part.capacitance_f) want("capacitance", *part.capacitance_f, false);
                          },
                          [&](const ShuntElement& part) {
                            if (part.resistance_ohm) {
                              want("resistance", *part.resistance_ohm, false);
                            }
                            if (part.inductance_h) want("inductance", *part.inductance_h, false);
                            want("capacitance", part.capacitance_f, true);
                          },
                          [&](const LineSection& part) {
                            want("impedance", part.impedance_ohm, false);
                            want("delay", part.delay_s, true);
                            want("loss", part.loss_db_at_1_ghz, true);
                          },
                          [&](const ModelSection& part) {
                            want("length", part.length_m, true);
                            for (Diagnostic& note : check_line(part.model, label)) {
                              note.message = place + note.message;
                              notes.push_back(std::move(note));
                            }
                          }},
               ladder[i]);
  }
  return notes;
}

Network ladder_network(const Ladder& ladder, const VectorXd& frequencies_hz, double reference_ohm) {
  const std::vector<Diagnostic> notes = check_ladder(ladder, "");
  for (const Diagnostic& note : notes) {
    if (note.severity == Diagnostic::Severity::kError) {
      throw std::invalid_argument("ladder_network: " + note.message);
    }
  }
  if (!(reference_ohm > 0.0) || !std::isfinite(reference_ohm)) {
    throw std::invalid_argument("ladder_network: reference_ohm must be > 0");
  }
  const Index n = frequencies_hz.size();
  if (n == 0 || !(frequencies_hz[0] >= 0.0) || !frequencies_hz.allFinite() ||
      (n > 1 && (frequencies_hz.tail(n - 1) - frequencies_hz.head(n - 1)).minCoeff() <= 0.0)) {
    throw std::invalid_argument("ladder_network: frequencies_hz must be >= 0 and rise");
  }
  std::vector<Network> parts = {from_points(frequencies_hz, reference_ohm, [](double) {
    return Eigen::Matrix2cd{{0.0, 1.0}, {1.0, 0.0}};
  })};
  for (const Element& element : ladder) {
    parts.push_back(element_network(element, frequencies_hz, reference_ohm));
  }
  return *cascade(parts, "").value;
}

Ladder package_ladder(double die_capacitance_f, const LineModel& line, double length_m,
                      double ball_capacitance_f) {
  ShuntElement die;
  die.capacitance_f = die_capacitance_f;
  ShuntElement ball;
  ball.capacitance_f = ball_capacitance_f;
  return {die, ModelSection{line, length_m}, ball};
}

Ladder mirrored(Ladder ladder) {
  std::reverse(ladder.begin(), ladder.end());
  return ladder;
}

Network turned_round(const Network& network) {
  const int n = network.num_ports();
  if (n % 2 != 0) throw std::invalid_argument("turned_round: an even number of ports is needed");
  std::vector<int> ports;
  for (int i = 0; i < n; ++i) ports.push_back((i + n / 2) % n + 1);
  return with_ports(network, ports);
}

Result<Network> without_fixture(const Network& measured, const std::optional<Network>& left,
                                const std::optional<Network>& right, std::string_view label) {
  const auto fail = [&](const std::string& message) {
    return failure<Network>(error_at(std::string(label), 0, message));
  };
  const int n = measured.num_ports();
  if (n % 2 != 0) {
    return fail("found a network with " + std::to_string(n) + " ports; wanted an even number");
  }
  double low = measured.frequencies_hz[0];
  double high = measured.frequencies_hz[measured.num_points() - 1];
  bool same_grid = true;
  for (const auto* half : {&left, &right}) {
    if (!*half) continue;
    if ((*half)->num_ports() != n) {
      return fail("found a fixture half with " + std::to_string((*half)->num_ports()) +
                  " ports; wanted " + std::to_string(n) + " as the measured network has");
    }
    const VectorXd& f = (*half)->frequencies_hz;
    same_grid = same_grid && f == measured.frequencies_hz;
    low = std::max(low, f[0]);
    high = std::min(high, f[f.size() - 1]);
  }
  Result<Network> result;
  VectorXd grid = measured.frequencies_hz;
  if (!same_grid) {
    const double* const begin = std::lower_bound(grid.data(), grid.data() + grid.size(), low);
    const double* const end = std::upper_bound(grid.data(), grid.data() + grid.size(), high);
    if (!(low < high) || end - begin < 2) {
      return fail("found frequency ranges without a common part; the highest start is " +
                  significant(hz_to_ghz(low), 6) + " GHz, the lowest end " +
                  significant(hz_to_ghz(high), 6) + " GHz");
    }
    grid = VectorXd(Eigen::Map<const VectorXd>(begin, end - begin));
    result.notes.push_back(warning_at(
        std::string(label), 0,
        "the frequency grids differ; the fixture was interpolated onto " +
            std::to_string(grid.size()) + " points from " + significant(hz_to_ghz(grid[0]), 6) +
            " to " + significant(hz_to_ghz(grid[grid.size() - 1]), 6) + " GHz"));
  }
  // One real reference everywhere makes the seams plain joins; the measured network's come back
  // at the end.
  const auto brought = [&](const Network& network) {
    Eigen::VectorXcd reference = Eigen::VectorXcd::Constant(n, measured.reference_ohm[0].real());
    Network same = network.reference_ohm == reference ? network : renormalised(network, reference);
    return is_same_grid(same.frequencies_hz, grid) ? same : resampled(same, grid);
  };
  Network inner = brought(measured);
  const Index half_ports = n / 2;
  for (const bool is_left : {true, false}) {
    const std::optional<Network>& half = is_left ? left : right;
    if (!half) continue;
    const Network fixture = brought(*half);
    for (Index k = 0; k < grid.size(); ++k) {
      const MatrixXcd s = fixture.at(k);
      const double least =
          s.bottomLeftCorner(half_ports, half_ports).jacobiSvd().singularValues()[half_ports - 1];
      if (!(least > amplitude_db_to_ratio(-100.0))) {
        return fail("found a fixture half that passes " +
                    (least > 0.0 ? significant(ratio_to_amplitude_db(least), 4) + " dB"
                                 : std::string("nothing")) +
                    " at " + significant(hz_to_ghz(grid[k]), 6) + " GHz; wanted over -100 dB");
      }
      const MatrixXcd outer = transfer_of(inner.at(k));
      const MatrixXcd chain = transfer_of(s);
      const MatrixXcd left_over =
          is_left
              ? MatrixXcd(chain.partialPivLu().solve(outer))
              : MatrixXcd(chain.transpose().partialPivLu().solve(outer.transpose()).transpose());
      inner.at(k) = scattering_of_transfer(left_over);
    }
  }
  if (!inner.values.allFinite()) {
    return fail(
        "the measured network passes nothing at some frequency; nothing can be told "
        "behind its fixture");
  }
  result.value = inner.reference_ohm == measured.reference_ohm
                     ? std::move(inner)
                     : renormalised(inner, measured.reference_ohm);
  return result;
}

}  // namespace tapwright
