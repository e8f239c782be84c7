#pragma once
// The one interface through which every solver sees every objective.

#include <Eigen/Core>
#include <functional>

#include "tapwright/eye/placed_eye.hpp"

namespace tapwright {

/// An objective at one place, as a function of x = (FIR taps, DFE volts); larger is better.
///
/// Shape:  x is (num_taps + num_dfe), in the order of FirLimits::taps and DfeLimits. `gradient` may
///         be null; otherwise it is resized to x and filled (a supergradient where there is a
///         kink).
/// Units:  volts of eye height, and volts per unit of x.
/// Limits: x need not keep the device's limits; the solver looks after those. A main cursor that is
///         not positive gives a negative height. With a line code, values count with the code.
struct Objective {
  using Function = std::function<double(const Eigen::VectorXd& x, Eigen::VectorXd* gradient)>;

  Eigen::Index num_taps = 0;
  Eigen::Index num_dfe = 0;
  Function value_v;
  bool is_concave = false;  ///< value_v is concave in x
  /// Concave in x and nowhere below value_v, for proofs; equals value_v when that is concave; empty
  /// when none is known.
  Function upper_bound_v;
};

/// `model` must outlive the result. Safe to call from several threads.
[[nodiscard]] Objective objective_at(const EyeModel& model, ObjectiveKind kind, const Place& place);

}  // namespace tapwright
