#include "tapwright/channel/ports.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <numbers>
#include <optional>

#include "tapwright/channel/network_operations.hpp"

namespace tapwright {
namespace {

using Eigen::Index;

std::string list_text(const std::vector<int>& ports) {
  std::string text = "[";
  for (const int port : ports) text += (text.size() > 1 ? ", " : "") + std::to_string(port);
  return text + "]";
}

/// The ports of a differential map, in+ in- out+ out-, each pair renormalised to one real
/// reference.
Network paired(const Network& network, const PortMap& map) {
  Network four = with_ports(network, {map.in[0], map.in[1], map.out[0], map.out[1]});
  Eigen::VectorXcd reference(4);
  for (const Index first : {0, 2}) {
    const double mean =
        (four.reference_ohm[first].real() + four.reference_ohm[first + 1].real()) / 2;
    reference.segment(first, 2).setConstant(mean);
  }
  return reference == four.reference_ohm ? four : renormalised(four, reference);
}

/// Energy sent from port to port per octave, summed over all octaves. On a linear scale the far-end
/// crosstalk of a tightly coupled pair can beat the line itself; per octave it can't, since it
/// falls with frequency while the line passes.
///
/// Shape: (n, n), zero on the diagonal.
Eigen::MatrixXd energies(const Network& network) {
  const int n = network.num_ports();
  const Eigen::VectorXd& f = network.frequencies_hz;
  Eigen::VectorXd octaves = Eigen::VectorXd::Ones(f.size());
  for (Index k = 1; k < f.size(); ++k) octaves[k] = (f[k] - f[k - 1]) / f[k];
  const Eigen::VectorXd sums = network.values.cwiseAbs2() * octaves;
  Eigen::MatrixXd energy = Eigen::Map<const Eigen::MatrixXd>(sums.data(), n, n);
  energy.diagonal().setZero();
  return energy;
}

/// Energy that arrives before `until_s`, in arbitrary units: the impulse response of the one-sided
/// spectrum under a Hann taper, summed over instants half a resolution apart.
double early_energy(const Network& network, int to, int from, double until_s) {
  const Eigen::VectorXd& f = network.frequencies_hz;
  const Eigen::VectorXcd s = network.parameter(to, from);
  const double top = f[f.size() - 1];
  double energy = 0.0;
  for (double t = 0.0; t < until_s; t += 0.5 / top) {
    std::complex<double> sum = 0.0;
    for (Index k = 1; k < f.size(); ++k) {
      const double taper = 0.5 + 0.5 * std::cos(std::numbers::pi * f[k] / top);
      sum += s[k] * std::polar(taper * (f[k] - f[k - 1]), 2.0 * std::numbers::pi * f[k] * t);
    }
    energy += std::norm(sum);
  }
  return energy;
}

}  // namespace

std::vector<Diagnostic> check_ports(const PortMap& map, int num_ports, std::string_view label) {
  std::vector<Diagnostic> notes;
  const auto complain = [&](const std::string& message) {
    notes.push_back(error_at(std::string(label), 0, message));
  };
  if (map.in.size() != map.out.size() || map.in.empty() || map.in.size() > 2) {
    complain("found ports in " + list_text(map.in) + " and out " + list_text(map.out) +
             "; wanted one of each (single-ended) or two of each (differential)");
  }
  std::vector<int> all = map.in;
  all.insert(all.end(), map.out.begin(), map.out.end());
  for (const int port : all) {
    if (port < 1 || port > num_ports) {
      complain("found port " + std::to_string(port) + "; the file has ports 1 to " +
               std::to_string(num_ports));
    }
  }
  std::sort(all.begin(), all.end());
  const auto twice = std::adjacent_find(all.begin(), all.end());
  if (twice != all.end()) {
    complain("found port " + std::to_string(*twice) + " more than once; wanted each port once");
  }
  return notes;
}

Result<Network> through_path(const Network& network, const PortMap& map, std::string_view label) {
  std::vector<Diagnostic> notes = check_ports(map, network.num_ports(), label);
  if (!notes.empty()) return {std::nullopt, std::move(notes)};
  if (map.in.size() == 1) return {with_ports(network, {map.in[0], map.out[0]}), {}};
  const Network four = paired(network, map);
  Network path = empty_network(four.frequencies_hz, Eigen::Vector2cd(2.0 * four.reference_ohm[0],
                                                                     2.0 * four.reference_ohm[2]));
  for (Index k = 0; k < path.num_points(); ++k) {
    const auto s = four.at(k);
    for (Index to = 0; to < 2; ++to) {
      for (Index from = 0; from < 2; ++from) {
        path.at(k)(to, from) = (s(2 * to, 2 * from) - s(2 * to, 2 * from + 1) -
                                s(2 * to + 1, 2 * from) + s(2 * to + 1, 2 * from + 1)) /
                               2.0;
      }
    }
  }
  return {std::move(path), {}};
}

Result<Network> mixed_mode(const Network& network, const PortMap& map, std::string_view label) {
  std::vector<Diagnostic> notes = check_ports(map, network.num_ports(), label);
  if (notes.empty() && map.in.size() != 2) {
    notes.push_back(error_at(std::string(label), 0,
                             "found a single-ended port map; modes need two ports on each side"));
  }
  if (!notes.empty()) return {std::nullopt, std::move(notes)};
  const Network four = paired(network, map);
  // Rows: d_in, d_out, c_in, c_out in terms of in+, in-, out+, out-.
  Eigen::Matrix4cd transform;
  transform << 1, -1, 0, 0, 0, 0, 1, -1, 1, 1, 0, 0, 0, 0, 1, 1;
  transform *= std::numbers::sqrt2 / 2;
  const Eigen::VectorXcd& z = four.reference_ohm;
  Network modes = empty_network(four.frequencies_hz,
                                Eigen::Vector4cd(2.0 * z[0], 2.0 * z[2], z[0] / 2.0, z[2] / 2.0));
  for (Index k = 0; k < modes.num_points(); ++k) {
    const Eigen::Matrix4cd s = four.at(k);
    modes.at(k) = transform * s * transform.transpose();
  }
  return {std::move(modes), {}};
}

Result<std::vector<Line>> find_lines(const Network& network, std::string_view label) {
  const auto fail = [&](const std::string& message) {
    return failure<std::vector<Line>>(error_at(std::string(label), 0, message));
  };
  const int n = network.num_ports();
  if (n % 2 != 0) {
    return fail("found " + std::to_string(n) +
                " ports; lines have two each, so that a port map must be given");
  }
  const Eigen::MatrixXd energy = energies(network);
  std::vector<int> partner;
  for (Index from = 0; from < n; ++from) {
    Index to = 0;
    energy.col(from).maxCoeff(&to);
    partner.push_back(static_cast<int>(to));
  }
  for (int port = 0; port < n; ++port) {
    const int other = partner[static_cast<std::size_t>(port)];
    const int back = partner[static_cast<std::size_t>(other)];
    if (back != port || other == port) {
      return fail("port " + std::to_string(port + 1) + " sends most to port " +
                  std::to_string(other + 1) + ", which sends most to port " +
                  std::to_string(back + 1) +
                  "; the data don't tell which port is the far end of which, give a port map");
    }
  }
  std::vector<Line> lines = {{1, partner[0] + 1}};
  for (int port = 1; port < n; ++port) {
    const int other = partner[static_cast<std::size_t>(port)];
    if (port > other || port == partner[0]) continue;
    // Coupled lines send crosstalk back to the near end from the first moment; nothing reaches the
    // far end before the line's delay. Where that shows no clear difference, the lower port is
    // near.
    const double half_s = std::min(mean_delay_s(network, partner[0], 0) / 2.0,
                                   200.0 / network.frequencies_hz.maxCoeff());
    const bool turned =
        early_energy(network, other, 0, half_s) > 4.0 * early_energy(network, port, 0, half_s);
    lines.push_back(turned ? Line{other + 1, port + 1} : Line{port + 1, other + 1});
  }
  std::sort(lines.begin(), lines.end(),
            [](const Line& a, const Line& b) { return a.near < b.near; });
  return {std::move(lines), {}};
}

Result<std::vector<PortMap>> guess_ports(const Network& network, std::string_view label) {
  if (network.num_ports() == 2) return {std::vector<PortMap>{{{1}, {2}}}, {}};
  Result<std::vector<Line>> lines = find_lines(network, label);
  if (!lines) return {std::nullopt, std::move(lines.notes)};
  std::vector<Line> left = *lines.value;
  if (left.size() % 2 != 0) {
    return failure<std::vector<PortMap>>(
        error_at(std::string(label), 0,
                 "found " + std::to_string(left.size()) +
                     " lines; differential pairs need an even number, give a port map"));
  }
  const Eigen::MatrixXd energy = energies(network);
  const auto coupling = [&](const Line& a, const Line& b) {
    return energy(b.near - 1, a.near - 1) + energy(b.far - 1, a.near - 1) +
           energy(b.near - 1, a.far - 1) + energy(b.far - 1, a.far - 1);
  };
  // The strongest coupling of all makes the first pair, and so on with what is left.
  std::vector<PortMap> lanes;
  while (!left.empty()) {
    std::size_t first = 0;
    std::size_t second = 1;
    for (std::size_t a = 0; a < left.size(); ++a) {
      for (std::size_t b = a + 1; b < left.size(); ++b) {
        if (coupling(left[a], left[b]) > coupling(left[first], left[second])) {
          first = a;
          second = b;
        }
      }
    }
    lanes.push_back({{left[first].near, left[second].near}, {left[first].far, left[second].far}});
    left.erase(left.begin() + static_cast<std::ptrdiff_t>(second));
    left.erase(left.begin() + static_cast<std::ptrdiff_t>(first));
  }
  std::sort(lanes.begin(), lanes.end(),
            [](const PortMap& a, const PortMap& b) { return a.in[0] < b.in[0]; });
  std::string taken;
  for (const PortMap& lane : lanes) {
    taken += (taken.empty() ? "in " : "; in ") + list_text(lane.in) + " out " + list_text(lane.out);
  }
  return {std::move(lanes),
          {warning_at(std::string(label), 0,
                      "no port map given; the data suggest " + taken + " (+ first)")}};
}

std::vector<Diagnostic> check_polarity(const Network& path, std::string_view label) {
  const Eigen::VectorXcd through = path.parameter(1, 0);
  const Eigen::VectorXd& f = path.frequencies_hz;
  // The phase of the points that carry most, followed to DC along a straight line; dispersion
  // bends it by far less than the half turn looked for.
  const Index count = std::min<Index>(through.size(), std::max<Index>(8, through.size() / 10));
  if (count < 2 || through.head(count).cwiseAbs().minCoeff() == 0.0) return {};
  Eigen::VectorXd phase(count);
  phase[0] = std::arg(through[0]);
  for (Index k = 1; k < count; ++k) {
    phase[k] = phase[k - 1] + std::arg(through[k] * std::conj(through[k - 1]));
  }
  const Eigen::VectorXd x = f.head(count).array() - f.head(count).mean();
  const double slope = x.dot(phase) / x.squaredNorm();
  const double at_dc = phase.mean() - slope * f.head(count).mean();
  if (std::cos(at_dc) >= 0.0) return {};
  return {warning_at(std::string(label), 0,
                     "the path turns the signal's sign; + and - of one side look swapped")};
}

}  // namespace tapwright
