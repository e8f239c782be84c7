#pragma once
// The transmitter FIR as knobs: which taps are free, and the limits that tie them together.

#include <Eigen/Core>
#include <optional>
#include <span>
#include <vector>

#include "search/problem.hpp"
#include "tapwright/equalizer/tx_fir.hpp"

namespace tapwright::search {

/// Free taps are all but the remainder, in the order of FirLimits::taps.
class FirSpace {
 public:
  /// `fixed` holds every tap at the given value.
  explicit FirSpace(const FirLimits& limits, const std::optional<Eigen::VectorXd>& fixed = {});

  [[nodiscard]] const FirLimits& limits() const { return limits_; }
  [[nodiscard]] const std::vector<Knob>& knobs() const { return knobs_; }
  [[nodiscard]] const std::vector<int>& positions() const { return positions_; }
  [[nodiscard]] int num_taps() const { return static_cast<int>(positions_.size()); }
  [[nodiscard]] int num_free() const { return static_cast<int>(knobs_.size()); }
  /// No setting has a larger sum |c_i|.
  [[nodiscard]] double peak_limit() const { return peak_limit_; }
  [[nodiscard]] int main_index() const { return main_index_; }
  /// `whole` with the FIR knobs (its first num_free) cut so that no box straddles zero where the
  /// remainder's sum |others| needs that.
  [[nodiscard]] std::vector<Box> roots(const std::vector<Knob>& all_knobs) const;
  /// All taps from the free ones.
  void expand(std::span<const double> x, std::span<double> taps) const;
  /// Slopes by the free taps from slopes by all taps; returns what is added to the constant.
  double reduce(const Box& box, std::span<const double> by_taps, std::span<double> by_free) const;
  void add_rows(const Box& box, CuttingPlanes& planes) const;
  /// The peak limit as a row, if x breaks it.
  bool separate(std::span<const double> x, CuttingPlanes& planes) const;
  /// Whether the taps, made of codes or real values, keep the limits.
  [[nodiscard]] bool allowed(std::span<const double> taps) const;

 private:
  FirLimits limits_;
  std::vector<Knob> knobs_;
  std::vector<int> free_;  ///< index in limits_.taps
  std::vector<int> positions_;
  int main_index_ = 0;
  int remainder_ = -1;
  bool is_fixed_ = false;
  bool is_empty_ = false;    ///< the least main tap leaves no code
  double row_slack_ = 0.0;   ///< keeps_limits rounds to 1e-9
  double peak_limit_ = 1.0;  ///< of the bound: no setting that keeps_limits accepts is above it
};

}  // namespace tapwright::search
