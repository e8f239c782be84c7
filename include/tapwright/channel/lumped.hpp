#pragma once
// Packages, connectors and other small parts, built from lumped elements and short lines; and the
// removal of a test fixture.

#include <Eigen/Core>
#include <optional>
#include <string_view>
#include <variant>
#include <vector>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/channel/line_model.hpp"
#include "tapwright/channel/network.hpp"

namespace tapwright {

// All values are those of the path: in a differential path a series element is the sum of both
// lines', a shunt element lies between the lines, an impedance is differential.

/// R, L and C one after the other in the line: Z = R + jwL + 1/(jwC). A capacitance blocks DC.
struct SeriesElement {
  double resistance_ohm = 0.0;
  double inductance_h = 0.0;
  std::optional<double> capacitance_f;  ///< none = no capacitor in the line
};

/// R, L and C side by side across the line: Y = 1/R + 1/(jwL) + jwC.
struct ShuntElement {
  std::optional<double> resistance_ohm;  ///< none = no resistor
  std::optional<double> inductance_h;    ///< none = no inductor
  double capacitance_f = 0.0;
};

/// A short uniform line by impedance and delay; its loss grows with the square root of frequency.
struct LineSection {
  double impedance_ohm = 0.0;
  double delay_s = 0.0;
  double loss_db_at_1_ghz = 0.0;
};

/// A length of any line model.
struct ModelSection {
  LineModel model;
  double length_m = 0.0;
};

/// Parts in order from the driver to the receiver.
using Element = std::variant<SeriesElement, ShuntElement, LineSection, ModelSection>;
using Ladder = std::vector<Element>;

/// What is wrong with the numbers; empty when nothing is. `label` names the ladder.
[[nodiscard]] std::vector<Diagnostic> check_ladder(const Ladder& ladder, std::string_view label);

/// The two-port of the ladder, both references reference_ohm. An empty ladder is a through.
///
/// Errors: std::invalid_argument if it does not pass check_ladder, unless reference_ohm > 0, or if
///         frequencies_hz is empty, negative or does not rise.
[[nodiscard]] Network ladder_network(const Ladder& ladder, const Eigen::VectorXd& frequencies_hz,
                                     double reference_ohm);

/// Die capacitance, package line, capacitance of the ball and the board's via, seen from the die.
///
/// Source: IEEE 802.3 Annex 93A, clause 93A.1.2 (transmitter order; `mirrored` for the receiver).
[[nodiscard]] Ladder package_ladder(double die_capacitance_f, const LineModel& line,
                                    double length_m, double ball_capacitance_f);

/// The same parts as seen from the other end.
[[nodiscard]] Ladder mirrored(Ladder ladder);

/// The same 2N-port turned round: ports 1 ... N and N+1 ... 2N change places.
///
/// Errors: std::invalid_argument on an odd number of ports.
[[nodiscard]] Network turned_round(const Network& network);

/// What lies between two fixture halves: measured = left, result, right in cascade. `left` has its
/// ports 1 ... N at the instrument, `right` its ports N+1 ... 2N; either may be absent. For equal
/// halves give `turned_round(left)` as right.
///
/// Grids:  as `cascade`: the halves are interpolated onto the measured grid, cut to the overlap,
///         with a warning.
/// Errors: port counts that differ or are odd, no overlap, a half that passes less than -100 dB
///         anywhere, since nothing can be told behind it.
[[nodiscard]] Result<Network> without_fixture(const Network& measured,
                                              const std::optional<Network>& left,
                                              const std::optional<Network>& right,
                                              std::string_view label);

}  // namespace tapwright
