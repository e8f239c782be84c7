#include "search/problem.hpp"

#include <cmath>

namespace tapwright::search {

Box Box::whole(const std::vector<Knob>& knobs) {
  Box box;
  for (const Knob& knob : knobs) {
    box.first.push_back(0);
    box.last.push_back(knob.values.empty() ? 0 : static_cast<int>(knob.values.size()) - 1);
    box.lo.push_back(knob.lo);
    box.hi.push_back(knob.hi);
  }
  return box;
}

void Box::set_codes(const std::vector<Knob>& knobs, std::size_t knob, int first_code,
                    int last_code) {
  first[knob] = first_code;
  last[knob] = last_code;
  lo[knob] = knobs[knob].values[static_cast<std::size_t>(first_code)];
  hi[knob] = knobs[knob].values[static_cast<std::size_t>(last_code)];
}

double Box::num_settings(const std::vector<Knob>& knobs) const {
  double product = 1.0;
  for (std::size_t i = 0; i < knobs.size(); ++i) {
    if (knobs[i].inner) continue;
    if (knobs[i].values.empty()) return -1.0;
    product *= last[i] - first[i] + 1;
  }
  return product;
}

std::int64_t height_key(double height_v) { return std::llround(height_v * 1e12); }

}  // namespace tapwright::search
