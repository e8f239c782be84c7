#pragma once
// The worst that intersymbol interference can do when the symbols are those of a line code.

#include <Eigen/Core>
#include <optional>
#include <vector>

#include "tapwright/eye/line_code.hpp"

namespace tapwright {

/// A sequence of the code as signs per cursor, the main symbol turned to +1:
///
///     isi_v = sum over k of signs[k] * row[k]   is what the sequence takes off the main cursor,
///
/// linear in the row, so each cut is a bound that holds for every row: the worst case of any row is
/// at least that. signs[main_index] = 0.
struct CodeCut {
  Eigen::VectorXd signs;  ///< in the order of the row
  int position = 0;       ///< of the main symbol in its character, 0 the first sent
  bool upward = false;    ///< the interference pushes up (main symbol below the highest level)
  /// The sequence itself, in the order sent, filled up to whole characters on both sides.
  Eigen::VectorXd sequence;
  Eigen::Index main_at = 0;  ///< place of the main symbol in it
};

/// Finds the worst case of many rows of one shape without allocating (but for the first `cut`): for
/// the inside of a search.
///
///     max over sequences a, positions and directions of  -+ sum over k != 0 of row_k a_{-k}
///
/// by the longest path through the code's trellis, exact but for rounding. Downward the main symbol
/// is any but the lowest level, upward any but the highest: +1 and -1 where there are two levels.
///
/// Shape:  row is (num_cursors), UI-spaced, after the DFE; entry main_index is the main cursor.
///         Without a main index every entry counts and the main symbol is free: an aggressor.
/// Units:  those of the row. -infinity where the code never sends a symbol that could be pushed.
/// Errors: std::invalid_argument unless 0 <= main_index < num_cursors; for a row of another size.
class CodedIsi {
 public:
  CodedIsi(LineCode code, Eigen::Index num_cursors, std::optional<Eigen::Index> main_index);

  /// The worst case over all positions and both directions.
  [[nodiscard]] double worst(const Eigen::Ref<const Eigen::VectorXd>& row);
  /// For one position of the main symbol and one direction.
  [[nodiscard]] double worst_at(const Eigen::Ref<const Eigen::VectorXd>& row, int position,
                                bool upward);
  /// The sequence that `worst` belongs to; the first of several. Valid until the next call.
  [[nodiscard]] const CodeCut& cut(const Eigen::Ref<const Eigen::VectorXd>& row);

  [[nodiscard]] const LineCode& code() const { return code_; }
  [[nodiscard]] Eigen::Index num_cursors() const { return num_cursors_; }

 private:
  void load(const Eigen::Ref<const Eigen::VectorXd>& row, bool upward);
  template <bool kTrack>
  double longest_path(int position, bool upward);
  void trace_back(Eigen::Index first, int position, bool upward);

  LineCode code_;
  Eigen::Index num_cursors_;
  Eigen::Index main_in_order_;  // place of the main symbol in the order sent; -1 = none
  std::vector<double> weight_;  // row in the order sent, zeros around it
  std::vector<double> sum_;     // of each key of a section
  std::vector<double> value_;   // longest path to each state
  std::vector<double> next_;
  struct Choice {
    int from = 0;
    int word = -1;
  };
  std::vector<Choice> choice_;  // [block * max_states + state]
  CodeCut cut_;
};

struct CodedWorstCase {
  double down_v = 0.0;  ///< most that the others can take off a main symbol above the lowest level
  double up_v = 0.0;    ///< most that they can add to one below the highest level
  [[nodiscard]] double isi_v() const { return down_v > up_v ? down_v : up_v; }
  Eigen::MatrixXd by_position_v;  ///< (period, 2): downward and upward
  /// The sequence that does it, ready for a pattern generator; any continuation that the code
  /// allows may surround it.
  CodeCut cut;
};

/// Shape, units, errors: as CodedIsi.
[[nodiscard]] CodedWorstCase coded_worst_case(const LineCode& code,
                                              const Eigen::Ref<const Eigen::VectorXd>& row,
                                              Eigen::Index main_index);

/// Largest sum over k of row_k a_{-k} over the sequences of the code, no symbol given: what an
/// aggressor with that code can do at one phase. Either sign: the larger of both.
[[nodiscard]] double coded_peak_v(const LineCode& code,
                                  const Eigen::Ref<const Eigen::VectorXd>& row);

}  // namespace tapwright
