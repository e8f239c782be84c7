#pragma once
#include <nlohmann/json.hpp>

#include "tapwright/report/figure.hpp"

namespace tapwright {

/// The figure for the page; numbers cut to six digits, a gap is null.
[[nodiscard]] nlohmann::ordered_json json_object_of(const Figure& figure);

/// `value` to six significant digits.
[[nodiscard]] double shortened(double value);

}  // namespace tapwright
