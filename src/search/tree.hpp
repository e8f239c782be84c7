#pragma once
// Branch and bound over the codes of one cell.

#include <chrono>
#include <cstdint>
#include <optional>
#include <vector>

#include "search/problem.hpp"
#include "tapwright/base/run_control.hpp"

namespace tapwright::search {

/// A setting of the knobs and what it is worth.
struct Found {
  double height_v = kImpossible;
  double signal_v = 0.0;  ///< smaller is better among equal heights
  std::vector<double> x;
};

/// By height, then by ratio: above 0 if `a` is the better one, 0 if they are equal.
[[nodiscard]] int compare(const Found& a, const Found& b);

/// The best settings of a cell: all that are equal in height and signal, up to a few.
class Best {
 public:
  void offer(double height_v, double signal_v, std::span<const double> x);
  [[nodiscard]] bool empty() const { return ties_.empty(); }
  [[nodiscard]] double height_v() const { return empty() ? kImpossible : ties_.front().height_v; }
  [[nodiscard]] const std::vector<Found>& ties() const { return ties_; }
  void merge(const Best& other);

 private:
  std::vector<Found> ties_;
};

/// The relaxation of one box.
struct Relaxation {
  enum class Status {
    kConverged,  ///< bound_v is the largest height of the box, reached at x
    kClosed,     ///< bound_v < stop_below_v
    kEmpty,      ///< no x of the box keeps the limits
    kLoose,      ///< bound_v holds but isn't reached
  };
  Status status = Status::kLoose;
  double bound_v = 0.0;
};

/// Cutting planes on a problem. Cuts stay valid from box to box of one root.
class Relaxer {
 public:
  explicit Relaxer(Problem& problem);
  /// Forgets all cuts; `start` is where the first one is made.
  void reset(const Box& root, std::span<const double> start);
  Relaxation relax(const Box& box, double stop_below_v, const CuttingPlanes::Basis* basis = nullptr);
  /// The heights of no setting are above this; min over all cuts.
  [[nodiscard]] double bound_at(std::span<const double> x) const;

  [[nodiscard]] std::span<const double> x() const { return planes_.x(); }
  [[nodiscard]] const CuttingPlanes::Basis& basis() const { return planes_.basis(); }
  [[nodiscard]] Multipliers multipliers() const;
  [[nodiscard]] Multipliers contradiction() const;
  [[nodiscard]] std::int64_t num_cuts() const { return num_cuts_; }

 private:
  void add_cut(std::span<const double> x, double b);

  Problem* problem_;
  CuttingPlanes planes_;
  std::vector<double> a_;
  std::vector<double> point_;
  enum class Origin : unsigned char { kLimits, kInput, kCut };
  void note_origins(Origin origin);
  [[nodiscard]] std::vector<double> point_of(int row) const;
  std::vector<Origin> origins_;  ///< of each row
  std::vector<double> points_;   ///< where each row was made, dim numbers a row
  std::vector<std::vector<double>> side_points_;  ///< empty unless the problem has any
  std::vector<double> cuts_;  ///< dim slopes and a constant each, for bound_at
  std::int64_t num_cuts_ = 0;
};

/// Where a box is cut in two: the knob farthest from its codes; where all stand on codes, the one
/// with most of them. knob is -1 when every coded knob has one code left.
struct Split {
  int knob = -1;
  int at = 0;  ///< first code of the upper half
};
[[nodiscard]] Split choose_split(const std::vector<Knob>& knobs, const Box& box,
                                 std::span<const double> x);
/// Coded knobs at the nearest code of the box, real ones as in x.
[[nodiscard]] std::vector<double> rounded(const std::vector<Knob>& knobs, const Box& box,
                                          std::span<const double> x);

struct TreeLimits {
  double incumbent_v = kImpossible;  ///< boxes below it are closed
  std::int64_t max_nodes = 0;
  bool certificate = false;
  const RunControl* control = nullptr;
  std::optional<std::chrono::steady_clock::time_point> deadline;
};

/// A node of the tree as it was left, in preorder.
struct TreeNode {
  enum class Kind { kSplit, kBound, kScored, kEmpty };
  Kind kind = Kind::kBound;
  int knob = 0;
  int at = 0;  ///< first code of the upper half
  Multipliers multipliers;
};

struct TreeResult {
  Best best;
  double open_bound_v = kImpossible;  ///< no setting of the boxes left open is above it
  std::int64_t num_nodes = 0;
  std::int64_t num_settings = 0;
  std::vector<std::vector<TreeNode>> trees;  ///< one a root box, when a certificate is wanted
  [[nodiscard]] bool closed() const { return open_bound_v == kImpossible; }
};

[[nodiscard]] TreeResult branch_and_bound(Problem& problem, const TreeLimits& limits);

/// Codes near x, moved one and two codes at a time while that helps. Nothing if no code there keeps
/// the limits. Real knobs stay as they are.
void round_and_move(Problem& problem, std::span<const double> x, Best& best,
                    std::int64_t& num_settings);

}  // namespace tapwright::search
