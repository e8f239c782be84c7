#include "search/input_limit.hpp"

#include <algorithm>
#include <cmath>
#include <cstddef>

namespace tapwright::search {

InputLimit::InputLimit(const FirLimits& limits, const PulseResponse& input) {
  for (const FirTap& tap : limits.taps) positions_.push_back(tap.position);
  const int first = std::min(0, positions_.front());
  const int last = std::max(0, positions_.back());
  const Eigen::Index per_ui = input.samples_per_ui();
  const int length = static_cast<int>((input.size() + per_ui - 1) / per_ui);
  front_ = last;
  count_ = (length + last - first + 3) / 4 * 4;
  for (Eigen::Index phase = 0; phase < per_ui; ++phase) {
    // Entry front_ of the row is output cursor `first`, so sample 0 stands at front_ - first.
    std::vector<double> row(static_cast<std::size_t>(last + count_ - first), 0.0);
    double sum = 0.0;
    for (int k = 0; k < length; ++k) {
      const double value = input.at(phase + k * per_ui);
      row[static_cast<std::size_t>(front_ - first + k)] = value;
      sum += std::abs(value);
    }
    flat_peak_ = std::max(flat_peak_, sum);
    rows_.push_back(std::move(row));
  }
}

double InputLimit::peak(std::span<const double> taps, std::span<double> slopes) const {
  std::vector<double> sums(taps.size());
  double peak = -1.0;
  for (const std::vector<double>& row : rows_) {
    sign_sums({row.data() + front_, 0, count_}, taps, positions_, sums);
    double sum = 0.0;
    for (std::size_t i = 0; i < taps.size(); ++i) sum += taps[i] * sums[i];
    if (sum > peak) {
      peak = sum;
      std::copy(sums.begin(), sums.end(), slopes.begin());
    }
  }
  return peak;
}

}  // namespace tapwright::search
