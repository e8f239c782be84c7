#pragma once
// The inner loop of every bound: UI-spaced cursors and what they contribute through their signs.

#include <span>

namespace tapwright::search {

/// One row of UI-spaced cursors with zeros on both sides, ready for `sign_sums`.
///
/// `data[k]` for k = 0 ... count - 1 stands for the output cursor `first_k + k`; tap i reads
/// data[k - position_i] and so needs zeros as far out as the positions reach, plus three more at the
/// end because four cursors are worked on at once.
struct PaddedRow {
  const double* data = nullptr;
  int first_k = 0;
  int count = 0;  ///< a multiple of 4
  [[nodiscard]] double at(int k, int position) const { return data[k - first_k - position]; }
};

/// sums_i = sum over k of sign(q_k) p_{k - i} with q_k = sum_i taps_i p_{k - i} and sign(0) = +1, so
/// that sum_i taps_i sums_i = sum |q_k| (and sums is a subgradient of it).
///
/// Shape:  taps, positions and sums are (n), any n >= 1.
/// Cost:   one pass. The order of additions is fixed, so every machine gives the same bits.
void sign_sums(const PaddedRow& row, std::span<const double> taps, std::span<const int> positions,
               std::span<double> sums);

/// sums_i = sum over k of weights_k p_{k - i}.
///
/// Shape:  weights is (row.count), entry k for output cursor first_k + k.
void weighted_sums(const PaddedRow& row, std::span<const double> weights,
                   std::span<const int> positions, std::span<double> sums);

}  // namespace tapwright::search
