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
  Network path = empty_network(
      four.frequencies_hz,
      Eigen::Vector2cd(2.0 * four.reference_ohm[0], 2.0 * four.reference_ohm[2]));
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
  Network modes = empty_network(
      four.frequencies_hz, Eigen::Vector4cd(2.0 * z[0], 2.0 * z[2], z[0] / 2.0, z[2] / 2.0));
  for (Index k = 0; k < modes.num_points(); ++k) {
    const Eigen::Matrix4cd s = four.at(k);
    modes.at(k) = transform * s * transform.transpose();
  }
  return {std::move(modes), {}};
}

}  // namespace tapwright
