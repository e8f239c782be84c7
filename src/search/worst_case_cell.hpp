#pragma once
// The worst-case eye height of independent symbols at one swing, CTLE state and sampling instant, as
// a concave function of the FIR with the DFE in closed form:
//
//   E(c) = 2 (q_0 R/(L-1) - sum over k != 0 of max(|q_k| - D_k, 0) - crosstalk(c)
//             - A_DD sum |h_J,k| - Q sigma(c) - sensitivity)

#include <Eigen/Core>
#include <cstdint>
#include <memory>
#include <vector>

#include "search/fir_space.hpp"
#include "search/input_limit.hpp"
#include "search/problem.hpp"
#include "search/sign_sums.hpp"
#include "tapwright/eye/eye_model.hpp"
#include "tapwright/eye/placed_eye.hpp"

namespace tapwright::search {

/// The sampling instants of a search: the candidates, or all that a sampling rule may lead to.
[[nodiscard]] std::vector<Eigen::Index> search_phases(const EyeModel& model);

/// The pulse of one CTLE state sorted by phase: UI-spaced samples lie side by side.
class StateRows {
 public:
  explicit StateRows(const PulseResponse& pulse);
  /// Copies p(t_s + kT), k = -num_pre ... num_post, with t_s at the sample index; zero outside.
  void copy(Eigen::Index sample_index, int num_pre, int num_post, double* to) const;

 private:
  Eigen::Index per_ui_;
  Eigen::Index per_phase_;
  Eigen::Index size_;
  std::vector<double> samples_;
};

/// What all cells of one swing and CTLE state share.
class WorstCaseState {
 public:
  /// Does this class cover the link? Not with a line code, a mask or clock jitter.
  [[nodiscard]] static bool covers(const EyeModel& model);

  /// `input` may be null when there is no peak-input limit.
  WorstCaseState(const EyeModel& model, const FirSpace& space, const InputLimit* input,
                 std::shared_ptr<const StateRows> rows, std::size_t swing_index,
                 std::size_t ctle_index);

 private:
  friend class WorstCaseCell;
  struct Dfe {
    int position = 1;
    bool relative = false;
    double limit = 0.0;           ///< volts at 1 V launch, or in units of q_0
    std::vector<double> values;   ///< codes in the same unit; empty = real
  };
  const EyeModel* model_;
  const FirSpace* space_;
  const InputLimit* input_;  ///< null when the limit can't bind
  PlacedEye eye_;            ///< without cursors: for crosstalk
  std::shared_ptr<const StateRows> rows_;
  Eigen::Index peak_index_ = 0;
  double share_ = 1.0;  ///< R/(L-1)
  double scale_ = 1.0;  ///< eye height in volts per volt of half eye at 1 V launch
  std::vector<Dfe> dfe_;
  bool dfe_has_codes_ = false;
  double noise_v_ = 0.0;             ///< receiver noise at 1 V launch
  double transmitter_ratio_ = 0.0;
  double quantile_ = 0.0;
  double dual_dirac_ui_ = 0.0;
  double random_factor_ = 0.0;       ///< sigma_RJ sigma_X
  double sensitivity_v_ = 0.0;       ///< at 1 V launch
  double input_limit_v_ = 0.0;       ///< at 1 V launch
  bool has_crosstalk_ = false;
  SamplingRule rule_ = SamplingRule::kBest;
};

class WorstCaseCell final : public Cell {
 public:
  explicit WorstCaseCell(const WorstCaseState& state);
  void move_to(Eigen::Index phase_samples) override;
  [[nodiscard]] Place place() const override;

  [[nodiscard]] const std::vector<Knob>& knobs() const override { return state_->space_->knobs(); }
  [[nodiscard]] std::vector<Box> roots() const override {
    return state_->space_->roots(state_->space_->knobs());
  }
  void add_rows(const Box& box, CuttingPlanes& planes) override {
    state_->space_->add_rows(box, planes);
  }
  double cut(const Box& box, std::span<const double> x, std::span<double> a) override;
  [[nodiscard]] std::vector<double> side_point() const override;
  bool separate(const Box& box, std::span<const double> x, CuttingPlanes& planes,
                bool thorough) override;
  double exact(std::span<const double> x, double worth) override;
  double signal(std::span<const double> x) override;
  [[nodiscard]] bool exact_is_concave() const override {
    return !state_->dfe_has_codes_ && state_->rule_ == SamplingRule::kBest;
  }

  /// The DFE is the nearest allowed to each cursor.
  [[nodiscard]] Settings settings(std::span<const double> x) override;
  [[nodiscard]] double quick_bound() const override;
  [[nodiscard]] bool has_sign_bound() const override;
  void take_signs(const Multipliers& from, Signs& signs) override;
  double sign_bound(const Box& box, const Signs& signs, std::span<double> a) override;

 private:
  /// Half eye at 1 V launch without crosstalk at taps_, and its slopes by all taps.
  double victim(std::span<double> slopes);
  /// What the DFE's codes leave more than real values would, half eye at 1 V launch.
  double code_loss();
  double noise(double main, std::span<double> slopes);
  [[nodiscard]] double tap_product(const PaddedRow& row, int k) const;

  const WorstCaseState* state_;
  Eigen::Index phase_samples_ = 0;
  std::vector<double> buffer_, jitter_buffer_;
  PaddedRow row_, jitter_row_;
  Eigen::MatrixXd jitter_gram_;
  std::vector<double> taps_, by_taps_, sums_;
  struct CrosstalkCut {
    std::vector<double> slopes;
    double constant = 0.0;
    std::vector<double> taps;  ///< where it was made
  };
  std::vector<CrosstalkCut> crosstalk_cuts_;
  std::size_t crosstalk_in_use_ = 0;  ///< of the last cut; one past the end = none
};

}  // namespace tapwright::search
