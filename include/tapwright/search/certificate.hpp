#pragma once
// Checking a proof without the search that made it.

#include <cstdint>
#include <string>

#include "tapwright/eye/eye_model.hpp"
#include "tapwright/search/solution.hpp"

namespace tapwright {

struct CertificateCheck {
  bool holds = false;
  double bound_v = 0.0;  ///< largest eye height that a box or a setting of the certificate leaves
  std::int64_t num_cells = 0;
  std::int64_t num_boxes = 0;     ///< closed by multipliers
  std::int64_t num_settings = 0;  ///< scored one by one
  std::string reason;             ///< what is wrong, when it doesn't hold
};

/// Goes through every cell and box of a certificate with sums alone: signs from the stored points,
/// the bound they give on this link's cursors, and the largest value of that linear bound within
/// the box and the peak limit (a fractional knapsack: largest slopes first).
///
/// Holds when the cells cover every swing, CTLE state and candidate phase of the model, the boxes
/// of each cell cover every FIR setting, and nothing exceeds certificate.bound_v by more than 1e-9
/// of it or 1e-12 V.
///
/// Units:  volts of eye height.
/// Limits: the worst-case objective of independent symbols at one phase; a line code, a mask or
///         clock jitter doesn't hold.
[[nodiscard]] CertificateCheck check_certificate(const EyeModel& model,
                                                 const Certificate& certificate);

}  // namespace tapwright
