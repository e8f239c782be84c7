#include "tapwright/eye/placed_eye.hpp"

#include <algorithm>
#include <cmath>
#include <cstdint>
#include <cstring>
#include <stdexcept>
#include <string>

#include "eye/instant.hpp"
#include "tapwright/base/normal.hpp"
#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

struct TapRange {
  int first = 0;  // <= 0
  int last = 0;   // >= 0
};

TapRange range_of(const FirLimits& limits) {
  return {std::min(0, limits.taps.front().position), std::max(0, limits.taps.back().position)};
}

/// Column i holds p_{k - position_i}, k over the range that the filtered span covers.
Eigen::MatrixXd shifted_columns(const FirLimits& limits, const Eigen::VectorXd& row) {
  const TapRange range = range_of(limits);
  Eigen::MatrixXd columns = Eigen::MatrixXd::Zero(row.size() + range.last - range.first,
                                                  static_cast<Eigen::Index>(limits.taps.size()));
  for (std::size_t i = 0; i < limits.taps.size(); ++i) {
    columns.col(static_cast<Eigen::Index>(i))
        .segment(limits.taps[i].position - range.first, row.size()) = row;
  }
  return columns;
}

// Two doubles at once: what every x86-64 and ARMv8 has, and one order of summation on each.
using Lanes = double __attribute__((vector_size(16)));
using LaneBits = std::int64_t __attribute__((vector_size(16)));

inline Lanes load(const double* from) {
  Lanes lanes;
  std::memcpy(&lanes, from, sizeof lanes);
  return lanes;
}

template <int kTaps>
double absolute_sum_of(const double* cursors, Eigen::Index num_cursors, const double* fir) {
  const LaneBits all_but_sign = {INT64_MAX, INT64_MAX};
  Lanes sums[4] = {};
  Eigen::Index k = 0;
  for (; k + 8 <= num_cursors; k += 8) {
    for (int lane = 0; lane < 4; ++lane) {
      const double* first = cursors + k + 2 * lane;
      Lanes q = load(first) * fir[0];
      for (int i = 1; i < kTaps; ++i) q += load(first + i * num_cursors) * fir[i];
      sums[lane] += reinterpret_cast<Lanes>(reinterpret_cast<LaneBits>(q) & all_but_sign);
    }
  }
  const Lanes both = (sums[0] + sums[1]) + (sums[2] + sums[3]);
  double sum = both[0] + both[1];
  for (; k < num_cursors; ++k) {
    double q = 0.0;
    for (int i = 0; i < kTaps; ++i) q += cursors[i * num_cursors + k] * fir[i];
    sum += std::abs(q);
  }
  return sum;
}

double row_times(const Eigen::MatrixXd& columns, Eigen::Index row, const double* fir) {
  double q = 0.0;
  for (Eigen::Index i = 0; i < columns.cols(); ++i) q += columns(row, i) * fir[i];
  return q;
}

double height_of(const PlacedEye& eye, const CursorMap& map, const double* fir,
                 const double* dfe_v) {
  const Link& link = eye.model->link;
  const double main_v = row_times(map.cursors, map.main_index, fir);
  double worst_v = absolute_sum_v(map.cursors.data(), map.cursors.rows(), map.cursors.cols(), fir) -
                   std::abs(main_v);
  for (std::size_t i = 0; i < map.dfe_rows.size(); ++i) {
    if (map.dfe_rows[i] < 0) {
      worst_v += std::abs(dfe_v[i]);
      continue;
    }
    const double q = row_times(map.cursors, map.dfe_rows[i], fir);
    worst_v += std::abs(q - dfe_v[i]) - std::abs(q);
  }
  double variance_v2 = eye.receiver_noise_v * eye.receiver_noise_v;
  const double transmitter_v = eye.transmitter_noise_ratio * main_v;
  variance_v2 += transmitter_v * transmitter_v;
  if (map.jitter.size() > 0) {
    double square_sum = 0.0;
    if (link.jitter.random_ui > 0.0) {
      for (Eigen::Index k = 0; k < map.jitter.rows(); ++k) {
        const double h = row_times(map.jitter, k, fir);
        square_sum += h * h;
      }
    }
    worst_v += link.jitter.dual_dirac_peak_ui *
               absolute_sum_v(map.jitter.data(), map.jitter.rows(), map.jitter.cols(), fir);
    variance_v2 += link.jitter.random_ui * link.jitter.random_ui *
                   symbol_variance(link.signal.levels) * square_sum;
  }
  return 2.0 * (main_v * signal_share(link.signal) - worst_v -
                eye.quantile * std::sqrt(variance_v2) - link.device.receiver.sensitivity_v);
}

}  // namespace

CursorMap cursor_map(const EyeModel& model, const Place& place, double offset_samples,
                     double amplitude_v) {
  const Device& device = model.link.device;
  const double whole = std::floor(offset_samples);
  const double share = offset_samples - whole;
  const Eigen::Index phase = place.phase_samples + static_cast<Eigen::Index>(whole);
  const auto row_at = [&](Eigen::Index shift) -> Eigen::VectorXd {
    Eigen::VectorXd row = victim_row(model, place.ctle_index, phase + shift).values;
    if (share > 0.0) {
      row += share * (victim_row(model, place.ctle_index, phase + shift + 1).values - row);
    }
    return amplitude_v * row;
  };
  CursorMap map;
  map.cursors = shifted_columns(device.transmitter.fir, row_at(0));
  map.main_index = model.span_ui[0] - range_of(device.transmitter.fir).first;
  const int per_ui = model.input.samples_per_ui();
  const Jitter& jitter = model.link.jitter;
  if (per_ui >= kLeastSamplesPerUi && (jitter.random_ui > 0.0 || jitter.dual_dirac_peak_ui > 0.0)) {
    map.jitter = shifted_columns(device.transmitter.fir, (row_at(1) - row_at(-1)) * (per_ui / 2.0));
  }
  for (const DfeTap& tap : device.receiver.dfe) {
    const Eigen::Index at = map.main_index + tap.position;
    map.dfe_rows.push_back(at < map.cursors.rows() ? at : -1);
  }
  return map;
}

double symbol_variance(int levels) {
  const double n = levels;
  return (n * n - 1.0) / (3.0 * (n - 1.0) * (n - 1.0));
}

double signal_share(const Signal& signal) {
  return (signal.levels == 2 ? 1.0 : signal.level_mismatch) / (signal.levels - 1.0);
}

PlacedEye place_eye(const EyeModel& model, const Place& place) {
  const Transmitter& transmitter = model.link.device.transmitter;
  if (place.swing_index >= transmitter.swings.size() || place.ctle_index >= model.states.size()) {
    throw std::invalid_argument("place_eye: swing " + std::to_string(place.swing_index) + " of " +
                                std::to_string(transmitter.swings.size()) + ", CTLE state " +
                                std::to_string(place.ctle_index) + " of " +
                                std::to_string(model.states.size()));
  }
  PlacedEye eye;
  eye.model = &model;
  eye.place = place;
  eye.amplitude_v = transmitter.swings[place.swing_index].value;
  eye.receiver_noise_v = model.states[place.ctle_index].noise_v;
  if (transmitter.snr_db)
    eye.transmitter_noise_ratio = 1.0 / amplitude_db_to_ratio(*transmitter.snr_db);
  eye.quantile = gaussian_quantile_of_tail(model.link.target.error_ratio);

  const int per_ui = model.input.samples_per_ui();
  const double clock_ui =
      per_ui >= kLeastSamplesPerUi ? eye.quantile * model.link.jitter.common_random_ui : 0.0;
  // A phase on the mask's edge belongs to it: 1e-9 absorbs the rounding of decimal fractions.
  const auto reach = static_cast<Eigen::Index>(
      std::floor((model.link.mask_width_ui / 2.0 + clock_ui) * per_ui + 1e-9));
  eye.phases.push_back(cursor_map(model, place, 0.0, eye.amplitude_v));
  for (Eigen::Index offset = 1; offset <= reach; ++offset) {
    eye.phases.push_back(cursor_map(model, place, -static_cast<double>(offset), eye.amplitude_v));
    eye.phases.push_back(cursor_map(model, place, static_cast<double>(offset), eye.amplitude_v));
  }
  return eye;
}

double absolute_sum_v(const double* cursors, Eigen::Index num_cursors, Eigen::Index num_taps,
                      const double* fir) {
  switch (num_taps) {
    case 1:
      return absolute_sum_of<1>(cursors, num_cursors, fir);
    case 2:
      return absolute_sum_of<2>(cursors, num_cursors, fir);
    case 3:
      return absolute_sum_of<3>(cursors, num_cursors, fir);
    case 4:
      return absolute_sum_of<4>(cursors, num_cursors, fir);
    case 5:
      return absolute_sum_of<5>(cursors, num_cursors, fir);
    default:
      break;
  }
  double sum = 0.0;
  for (Eigen::Index k = 0; k < num_cursors; ++k) {
    double q = 0.0;
    for (Eigen::Index i = 0; i < num_taps; ++i) q += cursors[i * num_cursors + k] * fir[i];
    sum += std::abs(q);
  }
  return sum;
}

double worst_case_height_v(const PlacedEye& eye, const double* fir, const double* dfe_v) {
  double height_v = height_of(eye, eye.phases.front(), fir, dfe_v);
  for (std::size_t i = 1; i < eye.phases.size(); ++i) {
    height_v = std::min(height_v, height_of(eye, eye.phases[i], fir, dfe_v));
  }
  if (!eye.model->link.crosstalk.empty()) {
    const auto num_taps = eye.phases.front().cursors.cols();
    height_v -= 2.0 * crosstalk_peak(eye, Eigen::Map<const Eigen::VectorXd>(fir, num_taps)).worst_v;
  }
  return height_v;
}

// --- aggressors
// -----------------------------------------------------------------------------------

namespace {

/// An aggressor sampled at its own UI: entry k of a row is x(first + k spacing), in samples.
struct AggressorGrid {
  const PulseResponse* pulse = nullptr;
  double spacing = 1.0;  // samples per aggressor UI
  double amplitude_v = 1.0;
  const Eigen::VectorXd* fixed_fir = nullptr;
  Eigen::Index num_phases = 1;
  Eigen::Index num_rows = 0;
  TapRange range;
};

AggressorGrid grid_of(const PlacedEye& eye, std::size_t index) {
  const EyeModel& model = *eye.model;
  const Aggressor& aggressor = model.link.crosstalk.at(index);
  AggressorGrid grid;
  grid.pulse = &model.states[eye.place.ctle_index].aggressors.at(index);
  grid.spacing = aggressor.ui_ratio * grid.pulse->samples_per_ui();
  grid.amplitude_v = aggressor.amplitude_v.value_or(eye.amplitude_v);
  grid.fixed_fir = aggressor.fixed_fir ? &*aggressor.fixed_fir : nullptr;
  grid.num_phases =
      std::max<Eigen::Index>(1, static_cast<Eigen::Index>(std::ceil(grid.spacing - 1e-9)));
  grid.range = range_of(model.link.device.transmitter.fir);
  grid.num_rows =
      static_cast<Eigen::Index>(std::ceil(static_cast<double>(grid.pulse->size()) / grid.spacing)) +
      1 + grid.range.last - grid.range.first;
  return grid;
}

double sample_at(const PulseResponse& pulse, double index) {
  const double below = std::floor(index);
  const auto i = static_cast<Eigen::Index>(below);
  const double share = index - below;
  return share == 0.0 ? pulse.at(i) : (1.0 - share) * pulse.at(i) + share * pulse.at(i + 1);
}

/// x before the FIR, shifted by `tap_position` UI.
double unfiltered(const AggressorGrid& grid, Eigen::Index phase, Eigen::Index k, int tap_position) {
  const double at = static_cast<double>(k + grid.range.first - tap_position) * grid.spacing +
                    static_cast<double>(phase);
  return grid.amplitude_v * sample_at(*grid.pulse, at);
}

Eigen::MatrixXd columns_at(const PlacedEye& eye, const AggressorGrid& grid, Eigen::Index phase) {
  const auto& taps = eye.model->link.device.transmitter.fir.taps;
  Eigen::MatrixXd columns(grid.num_rows, static_cast<Eigen::Index>(taps.size()));
  for (std::size_t i = 0; i < taps.size(); ++i) {
    for (Eigen::Index k = 0; k < grid.num_rows; ++k) {
      columns(k, static_cast<Eigen::Index>(i)) = unfiltered(grid, phase, k, taps[i].position);
    }
  }
  return columns;
}

}  // namespace

AggressorCursors aggressor_cursors(const PlacedEye& eye, std::size_t aggressor,
                                   const Eigen::VectorXd& fir, AggressorPhase rule) {
  const AggressorGrid grid = grid_of(eye, aggressor);
  const Eigen::VectorXd& taps = grid.fixed_fir != nullptr ? *grid.fixed_fir : fir;
  // The FIR on the whole record first: one pass serves every phase.
  Eigen::Index best_phase = 0;
  double best = -1.0;
  const auto& limits = eye.model->link.device.transmitter.fir;
  const bool on_grid = grid.spacing == grid.pulse->samples_per_ui();
  const FilteredPulse filtered =
      on_grid ? apply(limits, taps, *grid.pulse) : FilteredPulse{*grid.pulse, 0};
  for (Eigen::Index phase = 0; phase < grid.num_phases; ++phase) {
    double sum = 0.0;
    const auto add = [&](double x) {
      sum += rule == AggressorPhase::kLargestSum ? std::abs(x) : x * x;
    };
    if (on_grid) {
      const Eigen::Index per_ui = grid.pulse->samples_per_ui();
      for (Eigen::Index i = phase; i < filtered.pulse.size(); i += per_ui) {
        add(filtered.pulse.samples_v()[i]);
      }
    } else {
      for (Eigen::Index k = 0; k < grid.num_rows; ++k) {
        double x = 0.0;
        for (std::size_t i = 0; i < limits.taps.size(); ++i) {
          x += taps[static_cast<Eigen::Index>(i)] *
               unfiltered(grid, phase, k, limits.taps[i].position);
        }
        add(x);
      }
    }
    if (sum > best) {
      best = sum;
      best_phase = phase;
    }
  }
  AggressorCursors cursors;
  cursors.by_fir = columns_at(eye, grid, best_phase);
  cursors.values_v = cursors.by_fir * taps;
  if (grid.fixed_fir != nullptr) cursors.by_fir.setZero();
  return cursors;
}

CrosstalkPeak crosstalk_peak(const PlacedEye& eye, const Eigen::VectorXd& fir) {
  CrosstalkPeak peak;
  peak.supergradient = Eigen::VectorXd::Zero(fir.size());
  for (std::size_t i = 0; i < eye.model->link.crosstalk.size(); ++i) {
    const AggressorCursors x = aggressor_cursors(eye, i, fir, AggressorPhase::kLargestSum);
    peak.each_v.push_back(x.values_v.lpNorm<1>());
    peak.worst_v += peak.each_v.back();
    peak.supergradient += x.by_fir.transpose() * x.values_v.cwiseSign();
  }
  return peak;
}

}  // namespace tapwright
