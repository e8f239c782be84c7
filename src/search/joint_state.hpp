#pragma once
// One FIR for several channels at one swing and CTLE state: branch and bound over codes and over
// the sampling instants that the receivers may pick.

#include <cstdint>
#include <memory>
#include <vector>

#include "search/tree.hpp"
#include "search/worst_case_cell.hpp"

namespace tapwright::search {

/// min over channels of max over instants of E(c). For fixed instants that is concave, so a node is a
/// box of codes with the instants of some channels chosen; a channel's instant is branched on only
/// where that channel is the one that keeps the others' optimum from being reached.
class JointState {
 public:
  /// One state per channel, all of one swing and CTLE state; phases as for each channel alone.
  JointState(std::vector<std::unique_ptr<WorstCaseState>> states,
             std::vector<std::vector<Eigen::Index>> phases);

  /// Bounds every instant of every channel by itself and keeps those not below `incumbent_v`.
  /// Returns a bound of the joint height, kImpossible as soon as a channel has no instant left.
  double scan(double incumbent_v);
  /// The same for the instant at the peak alone, as a measure of how promising the state is.
  double glance();

  /// After scan().
  [[nodiscard]] TreeResult search(const TreeLimits& limits);
  /// Least over channels of the largest over their instants; kImpossible if a limit forbids it.
  double exact(std::span<const double> x, double worth);
  /// Every channel's setting at its best instant.
  [[nodiscard]] std::vector<Settings> settings(std::span<const double> x);
  [[nodiscard]] std::int64_t num_bounded() const { return num_bounded_; }

 private:
  struct Live {
    std::unique_ptr<WorstCaseCell> cell;
    double bound_v = 0.0;
    std::vector<double> cuts;  ///< dim slopes and a constant each, in the present root
  };
  struct Channel {
    std::unique_ptr<WorstCaseState> state;
    std::vector<Eigen::Index> phases;
    std::vector<Live> live;
  };
  struct Node {
    Box box;
    double bound_v = 0.0;
    std::vector<int> chosen;  ///< per channel: index in `live`, or -1
    std::int64_t number = 0;
  };
  struct Later {
    bool operator()(const Node& a, const Node& b) const {
      return a.bound_v != b.bound_v ? a.bound_v < b.bound_v : a.number > b.number;
    }
  };
  struct Outcome {
    bool closed = false;
    int branch_channel = -1;  ///< whose instant must be chosen, or -1
  };

  [[nodiscard]] double closing_height() const;
  double add_cut(std::size_t channel, std::size_t live, const Box& box, std::span<const double> x);
  Outcome relax(Node& node, CuttingPlanes& planes, std::vector<double>& x);
  [[nodiscard]] const std::vector<Knob>& knobs() const { return channels_.front().live.front().cell->knobs(); }

  std::vector<Channel> channels_;
  const TreeLimits* limits_ = nullptr;
  TreeResult result_;
  std::int64_t num_bounded_ = 0;
};

}  // namespace tapwright::search
