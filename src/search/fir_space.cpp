#include "search/fir_space.hpp"

#include <algorithm>
#include <array>
#include <cmath>
#include <cstddef>
#include <limits>
#include <utility>

namespace tapwright::search {
namespace {

// A real value may miss a limit by this much through rounding; keeps_limits works in steps of 1e-9.
constexpr double kRounding = 1e-12;

std::size_t at(int i) { return static_cast<std::size_t>(i); }

long long nano(double value) { return std::llround(value * 1e9); }

/// Whether rounding to integer multiples of 1e-9, as keeps_limits does, leaves the value as it is.
bool is_whole_nano(double value) {
  const double nano = value * 1e9;
  return std::abs(nano - std::round(nano)) < 1e-4;
}

}  // namespace

FirSpace::FirSpace(const FirLimits& limits, const std::optional<Eigen::VectorXd>& fixed)
    : limits_(limits),
      main_index_(static_cast<int>(limits.main_index())),
      is_fixed_(fixed.has_value()),
      peak_limit_(limits.peak_limit) {
  bool whole = true;  // nothing can pass the limit by rounding
  for (int i = 0; i < static_cast<int>(limits.taps.size()); ++i) {
    const FirTap& tap = limits.taps[at(i)];
    positions_.push_back(tap.position);
    Knob knob{tap.min, tap.max, {}};
    int first_code = 0;
    if (fixed) {
      knob.lo = knob.hi = (*fixed)[i];
      knob.values = {knob.lo};
    } else if (tap.is_remainder) {
      remainder_ = i;
      least_remainder_ = tap.min;
      if (i == main_index_ && limits.min_main) {
        least_remainder_ = std::max(least_remainder_, *limits.min_main);
      }
      continue;
    } else {
      for (const Code& code : tap.codes) {
        if (i == main_index_ && limits.min_main && code.value < *limits.min_main - 0.5e-9) {
          ++first_code;
          continue;
        }
        knob.values.push_back(code.value);
        whole = whole && is_whole_nano(code.value);
      }
      if (knob.values.empty() && !tap.codes.empty()) is_empty_ = true;
      row_slack_ = tap.codes.empty() ? row_slack_ : 0.5e-9;
      if (!knob.values.empty()) {
        knob.lo = knob.values.front();
        knob.hi = knob.values.back();
      } else if (i == main_index_ && limits.min_main) {
        knob.lo = std::max(knob.lo, *limits.min_main);
      }
    }
    free_.push_back(i);
    first_code_.push_back(first_code);
    knobs_.push_back(std::move(knob));
  }
  if (fixed) peak_limit_ = std::max(peak_limit_, fixed->lpNorm<1>());
  if (!whole) peak_limit_ += 1e-9;
}

std::vector<Box> FirSpace::roots(const std::vector<Knob>& all_knobs) const {
  if (is_empty_) return {};
  std::vector<Box> boxes{Box::whole(all_knobs)};
  for (const int i : straddling(all_knobs)) {
    std::vector<Box> halves;
    for (const Box& box : boxes) {
      Box lower = box;
      Box upper = box;
      const int split = first_positive(all_knobs, i);
      if (split < 0) {
        lower.hi[at(i)] = 0.0;
        upper.lo[at(i)] = 0.0;
      } else {
        lower.set_codes(all_knobs, at(i), 0, split - 1);
        upper.set_codes(all_knobs, at(i), split, box.last[at(i)]);
      }
      halves.push_back(std::move(lower));
      halves.push_back(std::move(upper));
    }
    boxes = std::move(halves);
  }
  return boxes;
}

std::vector<int> FirSpace::straddling(const std::vector<Knob>& all_knobs) const {
  std::vector<int> knobs;
  for (int i = 0; remainder_ >= 0 && i < num_free(); ++i) {
    if (all_knobs[at(i)].lo < 0.0 && all_knobs[at(i)].hi > 0.0) knobs.push_back(i);
  }
  return knobs;
}

int FirSpace::first_positive(const std::vector<Knob>& all_knobs, int knob) {
  const std::vector<double>& values = all_knobs[at(knob)].values;
  if (values.empty()) return -1;
  return static_cast<int>(std::upper_bound(values.begin(), values.end(), 0.0) - values.begin());
}

void FirSpace::expand(std::span<const double> x, std::span<double> taps) const {
  double sum = 0.0;
  for (int i = 0; i < num_free(); ++i) {
    taps[at(free_[at(i)])] = x[at(i)];
    sum += std::abs(x[at(i)]);
  }
  if (remainder_ >= 0) taps[at(remainder_)] = limits_.peak_limit - sum;
}

double FirSpace::reduce(const Box& box, std::span<const double> by_taps,
                        std::span<double> by_free) const {
  const double by_remainder = remainder_ >= 0 ? by_taps[at(remainder_)] : 0.0;
  for (int i = 0; i < num_free(); ++i) {
    const double sign = box.lo[at(i)] >= 0.0 ? 1.0 : -1.0;
    by_free[at(i)] = by_taps[at(free_[at(i)])] - sign * by_remainder;
  }
  return by_remainder * limits_.peak_limit;
}

double FirSpace::largest(const Box& box, std::span<const double> slopes, double constant) const {
  // Every tap starts at its smallest magnitude; moving out uses up the sum and gains |slope|.
  double budget = peak_limit_ + row_slack_ - least_remainder_;
  double value = constant;
  std::array<std::pair<double, double>, 16> ways;  // gain per unit, room
  std::size_t num_ways = 0;
  for (std::size_t i = 0; i < knobs_.size(); ++i) {
    const double start = std::clamp(0.0, box.lo[i], box.hi[i]);
    value += slopes[i] * start;
    budget -= std::abs(start);
    const double up = box.hi[i] - start;
    const double down = start - box.lo[i];
    const bool rising = slopes[i] > 0.0;
    // Outward only: a box on one side of zero moves away from it or stays.
    const double room = rising ? (box.hi[i] > 0.0 ? up : 0.0) : (box.lo[i] < 0.0 ? down : 0.0);
    if (room <= 0.0) continue;
    if (num_ways == ways.size()) return std::numeric_limits<double>::infinity();
    std::size_t at_place = num_ways++;
    const std::pair<double, double> way{std::abs(slopes[i]), room};
    for (; at_place > 0 && ways[at_place - 1].first < way.first; --at_place) {
      ways[at_place] = ways[at_place - 1];
    }
    ways[at_place] = way;
  }
  if (budget < -1e-9) return kImpossible;
  for (std::size_t i = 0; i < num_ways && budget > 0.0; ++i) {
    const double step = std::min(budget, ways[i].second);
    value += ways[i].first * step;
    budget -= step;
  }
  return value;
}

void FirSpace::add_rows(const Box& box, CuttingPlanes& planes) const {
  if (remainder_ < 0) return;
  const FirTap& tap = limits_.taps[at(remainder_)];
  std::vector<double> g(at(planes.dim()), 0.0);
  for (int i = 0; i < num_free(); ++i) g[at(i)] = box.lo[at(i)] >= 0.0 ? 1.0 : -1.0;
  planes.add_row(g, peak_limit_ - least_remainder_ + row_slack_);
  for (double& value : g) value = -value;
  planes.add_row(g, tap.max - peak_limit_ + row_slack_);
}

bool FirSpace::separate(std::span<const double> x, CuttingPlanes& planes) const {
  if (remainder_ >= 0 || is_fixed_) return false;
  double sum = 0.0;
  for (int i = 0; i < num_free(); ++i) sum += std::abs(x[at(i)]);
  if (sum <= peak_limit_ + kRounding) return false;
  std::vector<double> g(at(planes.dim()), 0.0);
  for (int i = 0; i < num_free(); ++i) g[at(i)] = x[at(i)] < 0.0 ? -1.0 : 1.0;
  planes.add_row(g, peak_limit_);
  return true;
}

bool FirSpace::allowed(std::span<const double> taps) const {
  if (is_fixed_) return true;
  const auto within = [&](int i) {
    const FirTap& tap = limits_.taps[at(i)];
    const long long value = nano(taps[at(i)]);
    return value >= nano(tap.min) && value <= nano(tap.max) &&
           (i != main_index_ || !limits_.min_main || value >= nano(*limits_.min_main));
  };
  double sum = 0.0;
  for (const double value : taps) sum += std::abs(value);
  if (nano(sum) > nano(limits_.peak_limit)) return false;
  if (remainder_ >= 0 && !within(remainder_)) return false;
  for (int i = 0; i < num_free(); ++i) {  // coded knobs hold nothing but what is allowed
    if (knobs_[at(i)].values.empty() && !within(free_[at(i)])) return false;
  }
  return true;
}

}  // namespace tapwright::search
