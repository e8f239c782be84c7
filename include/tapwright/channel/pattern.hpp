#pragma once
// Known test patterns, as symbols in the order they go over the wire.

#include <Eigen/Core>
#include <cstdint>
#include <optional>
#include <string_view>
#include <variant>
#include <vector>

#include "tapwright/base/diagnostic.hpp"

namespace tapwright {

/// A binary pseudo-random sequence of period 2^order - 1, or its PAM-4 form.
///
/// Bit n is x(n - a) xor x(n - b) ..., preceded by ones, and then inverted where the recommendation
/// inverts:
/// 7: 7, 6.  9: 9, 5.  11: 11, 9.  13: 13, 12, 2, 1.  15: 15, 14, inverted.  20: 20, 3.
/// 23: 23, 18, inverted.  31: 31, 28, inverted.
///
/// Source: ITU-T O.150 (9, 11, 15, 20, 23, 31); IEEE 802.3 for 13; common practice for 7
///         (polynomials from memory; the tests check that each has the longest period).
struct Prbs {
  int order = 0;
  /// Pairs of bits, first the higher, Gray-coded: 00, 01, 11, 10 are -1, -1/3, 1/3, 1. One period
  /// takes two of the bits'. PRBS13Q for order 13 (IEEE 802.3).
  bool pam4 = false;
  friend bool operator==(const Prbs&, const Prbs&) = default;
};

/// Levels as given, such as +1 and -1, repeated for ever.
struct SymbolList {
  std::vector<double> levels;
};

using Pattern = std::variant<Prbs, SymbolList>;

/// The pattern called `prbs7`, `prbs9`, `prbs11`, `prbs13`, `prbs15`, `prbs20`, `prbs23`,
/// `prbs31` or `prbs13q`, in any case of letters.
///
/// Errors: an error note labelled `label` for any other name.
[[nodiscard]] Result<Pattern> pattern_named(std::string_view name, std::string_view label);

/// Symbols in one period. Errors: std::invalid_argument for an order that is not listed or an empty
/// list; so for all functions here.
[[nodiscard]] std::int64_t period(const Pattern& pattern);

/// Levels within [-1, 1] of symbols first ... first + count - 1 of the endless pattern; `first` may
/// be negative.
[[nodiscard]] Eigen::VectorXd symbols(const Pattern& pattern, std::int64_t first,
                                      Eigen::Index count);

/// Bits first ... first + count - 1 of the endless binary sequence, as sent.
[[nodiscard]] std::vector<std::uint8_t> prbs_bits(int order, std::int64_t first,
                                                  std::int64_t count);

/// Index within the period at which the given bits stand in the sequence; none when they don't.
///
/// Shape: bits holds at least `order` entries of 0 or 1; the first `order` settle the place.
[[nodiscard]] std::optional<std::int64_t> prbs_index(int order,
                                                     const std::vector<std::uint8_t>& bits);

}  // namespace tapwright
