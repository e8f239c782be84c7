#pragma once
// Any objective of the eye room as a concave bound over FIR and DFE, for the links that
// WorstCaseState doesn't cover: line codes, masks, clock jitter, heights at an error ratio.

#include <Eigen/Core>
#include <memory>
#include <vector>

#include "search/fir_space.hpp"
#include "search/input_limit.hpp"
#include "search/problem.hpp"
#include "tapwright/eye/eye_model.hpp"
#include "tapwright/eye/objective.hpp"

namespace tapwright::search {

/// Knobs: the free FIR taps, then the DFE taps in volts.
///
/// With independent symbols at one phase the best DFE is the settled one, at any objective: then the
/// DFE knobs are inner. Otherwise DFE codes in volts are branched over like the FIR's, real values
/// are part of the bound's optimum, and codes relative to the main cursor are inner and only
/// searched (exact_is_all is false).
class ObjectiveCell final : public Cell {
 public:
  /// Whether a concave bound is known for the model's objective.
  [[nodiscard]] static bool covers(const EyeModel& model);

  ObjectiveCell(const EyeModel& model, const FirSpace& space, const InputLimit* input,
                std::size_t swing_index, std::size_t ctle_index);

  void move_to(Eigen::Index phase_samples) override;
  [[nodiscard]] Place place() const override { return place_; }
  [[nodiscard]] const std::vector<Knob>& knobs() const override { return knobs_; }
  [[nodiscard]] std::vector<Box> roots() const override { return space_->roots(knobs_); }
  void add_rows(const Box& box, CuttingPlanes& planes) override;
  double cut(const Box& box, std::span<const double> x, std::span<double> a) override;
  bool separate(const Box& box, std::span<const double> x, CuttingPlanes& planes,
                bool thorough) override;
  double exact(std::span<const double> x, double worth) override;
  double signal(std::span<const double> x) override;
  [[nodiscard]] bool exact_is_concave() const override { return is_concave_; }
  [[nodiscard]] bool exact_is_all() const override { return is_all_; }
  [[nodiscard]] Settings settings(std::span<const double> x) override;
  [[nodiscard]] double quick_bound() const override;

 private:
  void expand(std::span<const double> x);
  [[nodiscard]] double main_cursor_v() const;
  /// FIR and the DFE that exact() counts with, after expand().
  [[nodiscard]] Eigen::VectorXd chosen(std::span<const double> x);
  [[nodiscard]] bool has_dfe_codes() const;

  const EyeModel* model_;
  const FirSpace* space_;
  const InputLimit* input_;
  Place place_;
  double amplitude_v_ = 1.0;
  std::vector<Knob> knobs_;
  bool settles_ = false;  ///< the settled DFE is the best
  bool is_concave_ = true;
  bool is_all_ = true;
  Objective objective_;
  CursorRow row_;  ///< at 1 V launch
  std::vector<double> taps_, by_taps_;
  Eigen::VectorXd point_, gradient_;
};

}  // namespace tapwright::search
