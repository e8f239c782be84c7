#pragma once
// From the ports of a file to the path between a driver and a receiver.

#include <Eigen/Core>
#include <string>
#include <string_view>
#include <vector>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/channel/network.hpp"

namespace tapwright {

/// Ports as people count them, from 1. One entry each: single-ended. Two: differential, the first
/// one +. Swapping the entries of one side turns the polarity.
struct PortMap {
  std::vector<int> in;
  std::vector<int> out;
  friend bool operator==(const PortMap&, const PortMap&) = default;
};

/// Checks a map against a network: port numbers, one or two entries on both sides, none twice.
///
/// Errors: a note for each fault; `label` names the place in the notes.
[[nodiscard]] std::vector<Diagnostic> check_ports(const PortMap& map, int num_ports,
                                                  std::string_view label);

/// The two-port from `in` to `out`; all other ports end in their reference. Differential: the dd
/// block of the mixed-mode matrix, port reference z+ + z-. The same function gives crosstalk: `in`
/// the aggressor's ports, `out` the victim's receiver.
///
/// Units:  the reference of a differential port is twice that of its single-ended ports; if the
///         two differ (or are complex), both are first renormalised to the mean of real parts.
/// Errors: those of check_ports.
/// Source: Bockelman and Eisenstadt, IEEE Trans. MTT 43(7), 1995.
[[nodiscard]] Result<Network> through_path(const Network& network, const PortMap& map,
                                           std::string_view label);

/// All four mode blocks of a differential path, as a four-port with ports in the order
/// d_in, d_out, c_in, c_out: its top left 2 x 2 block is dd, top right dc (common to differential),
/// bottom left cd, bottom right cc. References: 2z for d, z/2 for c.
///
/// Errors: those of check_ports; a single-ended map is refused.
[[nodiscard]] Result<Network> mixed_mode(const Network& network, const PortMap& map,
                                         std::string_view label);

}  // namespace tapwright
