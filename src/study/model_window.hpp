#pragma once
#include "tapwright/eye/eye_model.hpp"

namespace tapwright {

/// The model with its records cut to what the span can reach: scores the same settings to the same
/// heights in a fraction of the memory. What lies outside the span is no longer known, and the span
/// is kept as given.
[[nodiscard]] EyeModel within_span(EyeModel model);

}  // namespace tapwright
