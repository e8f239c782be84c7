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

/// A line of a multi-port file: its near port and its far one, 1-based.
struct Line {
  int near = 0;
  int far = 0;
  friend bool operator==(const Line&, const Line&) = default;
};

/// Which port is the far end of which: the partner that gets most of the energy per octave sent
/// into a port. Port 1 is taken as near; another line's near port is the one that hears port 1
/// before its signal can have run down the line, or the lower one where that can't be told.
/// Ascending by near port.
///
/// Errors: an odd number of ports, or partners that do not agree with each other.
[[nodiscard]] Result<std::vector<Line>> find_lines(const Network& network, std::string_view label);

/// The port maps that the data suggest, one a lane. Two ports: from 1 to 2. Four or more:
/// differential lanes, each of the two lines with the strongest coupling between them, the line of
/// the lower near port as +; where no line couples to another, in ascending order. A warning says
/// what was taken; there is none for two ports, whose order is the format's own.
///
/// Errors: those of find_lines; a number of lines that is odd and not 1.
[[nodiscard]] Result<std::vector<PortMap>> guess_ports(const Network& network,
                                                       std::string_view label);

/// A warning when the path turns the signal's sign, as it does when + and - of one side are
/// swapped: its phase, followed down to DC, comes nearer to half a turn than to none. Not for
/// crosstalk, whose sign is free.
///
/// Shape: path has two ports.
[[nodiscard]] std::vector<Diagnostic> check_polarity(const Network& path, std::string_view label);

}  // namespace tapwright
