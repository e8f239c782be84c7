#include "tapwright/equalizer/code.hpp"

#include <cmath>
#include <stdexcept>

#include "tapwright/base/text.hpp"

namespace tapwright {

std::vector<Code> codes_from_step(double min, double max, double step) {
  if (!(step > 0.0) || !std::isfinite(step)) {
    throw std::invalid_argument("codes_from_step: step = " + exact(step) + ", but it must be > 0");
  }
  if (!(min <= max)) {
    throw std::invalid_argument("codes_from_step: min = " + exact(min) + " lies above max = " +
                                exact(max));
  }
  constexpr double kMaxCodes = 100000.0;
  constexpr double kSlack = 1e-9;  // decimal steps such as 0.0125 are not exact in binary
  const double first = std::ceil(min / step - kSlack);
  const double last = std::floor(max / step + kSlack);
  if (!(std::abs(first) <= 1e9 && std::abs(last) <= 1e9) || last - first + 1.0 > kMaxCodes) {
    throw std::invalid_argument("codes_from_step: over 100000 codes of step " + exact(step) +
                                " between " + exact(min) + " and " + exact(max));
  }
  std::vector<Code> codes;
  for (int k = static_cast<int>(first); k <= static_cast<int>(last); ++k) {
    codes.push_back({k, k * step});
  }
  return codes;
}

}  // namespace tapwright
