#pragma once
// What a search answers: settings, what they are worth, how sure that is, and how it got there.

#include <Eigen/Core>
#include <cstdint>
#include <optional>
#include <string>
#include <vector>

#include "tapwright/base/diagnostic.hpp"
#include "tapwright/equalizer/device.hpp"
#include "tapwright/eye/score.hpp"

namespace tapwright {

/// How sure it is that nothing within the limits is better.
struct Proof {
  enum class Kind {
    kProven,     ///< every (swing, CTLE state, sampling instant) was closed by a bound or a score
    kBounded,    ///< no setting is better than bound_v; something may be better than the answer
    kExhausted,  ///< every code of every knob was scored
    kNone,       ///< no claim
  };
  Kind kind = Kind::kNone;
  double bound_v = 0.0;           ///< eye height that no setting exceeds; unused for kNone
  double gap_v = 0.0;             ///< bound_v less the answer's eye height, never negative
  std::int64_t num_cells = 0;     ///< (swing, CTLE state, sampling instant) triples looked at
  std::int64_t num_nodes = 0;     ///< boxes of FIR codes bounded
  std::int64_t num_settings = 0;  ///< settings scored one by one
  std::string reason;             ///< one sentence: what was closed, or what is missing
};

/// One classical method on the same link, scored like the answer.
struct Compared {
  std::string name;                  ///< "no equalization", "zero forcing", "MMSE", ...
  std::optional<Settings> settings;  ///< none when the method has no answer here
  std::optional<Score> score;
  std::string note;  ///< why there is none, or what was rounded or clipped
};

/// One stage of the search.
struct TrailStep {
  std::string stage;
  double height_v = 0.0;         ///< best eye height known after the stage
  double bound_v = 0.0;          ///< eye height that nothing exceeds, as known after the stage
  std::int64_t num_settings = 0; ///< settings scored up to here
};

/// Proof that anyone can check with a few sums.
///
/// For independent symbols any numbers s_k in [-1, 1] bound every setting c of a box:
///   E/2 <= max over the box of sum_i c_i (p_{-i} w - sum_{k != 0} s_k p_{k-i}) + sum_k D_k |s_k|
/// (w = 1/(L-1); crosstalk, jitter and noise enter likewise). The s_k are stored as what made them:
/// `points` and `weights` of one cell, s_k = sum_j weights_j sign(q_k(points_j)), where sign(0) = 1
/// and a DFE cursor within its limit counts 0. Any points and any weights that are >= 0 and sum to 1
/// give a valid bound, so rounding in a search can't void it.
struct Certificate {
  struct Multipliers {
    std::size_t cell = 0;  ///< index in `cells` of the pulses that the signs were taken from
    std::vector<Eigen::VectorXd> points;  ///< FIR taps, each (num taps)
    std::vector<double> weights;          ///< one a point
    /// Taps whose worst crosstalk phase and signs each point's bound uses; an entry without taps
    /// leaves crosstalk out. Empty when the link has none.
    std::vector<Eigen::VectorXd> crosstalk_points;
    std::vector<Eigen::VectorXd> input_points;  ///< taps where the peak-input limit was cut
    std::vector<double> input_weights;          ///< >= 0; one an input point
  };
  /// A box of FIR settings. Nodes stand in preorder: a split is followed by the nodes of its lower
  /// half, then those of its upper half.
  struct Node {
    enum class Kind {
      kSplit,   ///< tap `tap`: codes [.., at) in the lower half, [at, ..) in the upper; a tap
                ///< without codes at 0, then `at` is -1
      kBound,   ///< closed by multipliers[multipliers]
      kScored,  ///< every setting of the box, scored one by one
      kEmpty,   ///< multipliers[multipliers] (or the FIR's own limits) show that nothing is allowed
    };
    Kind kind = Kind::kBound;
    int tap = 0;  ///< index in FirLimits::taps
    int at = 0;
    std::size_t multipliers = 0;
  };
  struct Cell {
    std::size_t swing_index = 0;
    std::size_t ctle_index = 0;
    Eigen::Index phase_samples = 0;
    std::vector<Node> nodes;
  };
  double bound_v = 0.0;  ///< the eye height that no setting exceeds
  std::vector<Multipliers> multipliers;
  std::vector<Cell> cells;
};

struct Solution {
  Settings settings;
  Score score;
  Proof proof;
  std::vector<Compared> compared;
  std::vector<TrailStep> trail;
  std::optional<Certificate> certificate;  ///< when asked for, and the proof is of that kind
  std::vector<Diagnostic> warnings;
};

}  // namespace tapwright
