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
  [[nodiscard]] int tap_of(int knob) const { return free_[static_cast<std::size_t>(knob)]; }
  /// Codes of the tap that the least main tap forbids: index in FirTap::codes of the knob's first.
  [[nodiscard]] int first_code(int knob) const { return first_code_[static_cast<std::size_t>(knob)]; }
  /// Boxes that cover all knobs (the FIR's are the first num_free), cut at zero where the remainder's
  /// sum |others| needs one sign: each of `straddling` in turn, lower half first.
  [[nodiscard]] std::vector<Box> roots(const std::vector<Knob>& all_knobs) const;
  [[nodiscard]] std::vector<int> straddling(const std::vector<Knob>& all_knobs) const;
  /// Index of the knob's first code above zero, or -1 if it is real.
  [[nodiscard]] static int first_positive(const std::vector<Knob>& all_knobs, int knob);
  /// All taps from the free ones.
  void expand(std::span<const double> x, std::span<double> taps) const;
  /// Slopes by the free taps from slopes by all taps; returns what is added to the constant.
  double reduce(const Box& box, std::span<const double> by_taps, std::span<double> by_free) const;
  /// Largest slopes x + constant over the box within the peak limit: a fractional knapsack, largest
  /// slopes first. kImpossible if the box has nothing within the limit.
  [[nodiscard]] double largest(const Box& box, std::span<const double> slopes,
                               double constant) const;
  void add_rows(const Box& box, CuttingPlanes& planes) const;
  /// The peak limit as a row, if x breaks it.
  bool separate(std::span<const double> x, CuttingPlanes& planes) const;
  /// keeps_limits() for taps that expand() made of the knobs' own codes and real values, which saves
  /// looking the codes up.
  [[nodiscard]] bool allowed(std::span<const double> taps) const;

 private:
  FirLimits limits_;
  std::vector<Knob> knobs_;
  std::vector<int> free_;  ///< index in limits_.taps
  std::vector<int> first_code_;
  std::vector<int> positions_;
  int main_index_ = 0;
  int remainder_ = -1;
  double least_remainder_ = 0.0;
  bool is_fixed_ = false;
  bool is_empty_ = false;    ///< the least main tap leaves no code
  double row_slack_ = 0.0;   ///< keeps_limits rounds to 1e-9
  double peak_limit_ = 1.0;  ///< of the bound: no setting that keeps_limits accepts is above it
};

}  // namespace tapwright::search
