#pragma once
#include <vector>

namespace tapwright {

/// A register code and the value it stands for, in the unit of its knob.
struct Code {
  int code = 0;
  double value = 0.0;
  friend bool operator==(const Code&, const Code&) = default;
};

/// The multiples k * step inside [min, max], ascending by value, each with code k. A bound within
/// 1e-9 steps of a multiple counts as that multiple. Empty when no multiple lies inside.
///
/// Errors: std::invalid_argument if step is not > 0, min > max, or over 100000 codes come out.
[[nodiscard]] std::vector<Code> codes_from_step(double min, double max, double step);

}  // namespace tapwright
