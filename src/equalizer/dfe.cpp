#include "tapwright/equalizer/dfe.hpp"

#include <algorithm>
#include <cmath>

namespace tapwright {

double settled_v(const DfeTap& tap, double wanted_v, double main_cursor_v) {
  const double unit_v = tap.relative ? std::abs(main_cursor_v) : 1.0;
  if (tap.codes.empty()) return std::clamp(wanted_v, -tap.max * unit_v, tap.max * unit_v);
  const auto nearer = [&](const Code& a, const Code& b) {
    const double da = std::abs(a.value * unit_v - wanted_v);
    const double db = std::abs(b.value * unit_v - wanted_v);
    return da != db ? da < db : std::abs(a.value) < std::abs(b.value);
  };
  return std::min_element(tap.codes.begin(), tap.codes.end(), nearer)->value * unit_v;
}

double limit_v(const DfeTap& tap, double main_cursor_v) {
  double limit = tap.max;
  if (!tap.codes.empty()) {
    limit = 0.0;
    for (const Code& code : tap.codes) limit = std::max(limit, std::abs(code.value));
  }
  return tap.relative ? limit * std::abs(main_cursor_v) : limit;
}

}  // namespace tapwright
