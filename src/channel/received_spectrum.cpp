#include "tapwright/channel/received_spectrum.hpp"

#include <algorithm>
#include <boost/math/interpolators/cardinal_quintic_b_spline.hpp>
#include <cmath>
#include <complex>
#include <numbers>
#include <string>
#include <vector>

#include "tapwright/base/fft.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

using std::numbers::pi;
using Complex = std::complex<double>;

constexpr int kLeadInUi = 64;  ///< a record from a frequency response opens so long before launch
constexpr Eigen::Index kLargestRecord = Eigen::Index{1} << 22;
constexpr double kTaperShare = 0.1;     ///< of the top frequency
constexpr double kWorthTelling = 5e-3;  ///< of the pulse's peak
constexpr int kTailUi = 64;             ///< zeros after an imported record, at least

std::optional<Diagnostic> fault(const TimeGrid& grid, const std::string& place) {
  if (!(std::isfinite(grid.ui_s) && grid.ui_s > 0)) {
    return error_at(
        place, 0,
        "found a unit interval of " + exact(grid.ui_s) + " s; wanted a finite one above 0");
  }
  if (grid.samples_per_ui < 1 || grid.samples_per_ui > 1024) {
    return error_at(
        place, 0,
        "found " + std::to_string(grid.samples_per_ui) + " samples per UI; wanted 1 to 1024");
  }
  return std::nullopt;
}

std::string mv(double volts) { return significant(v_to_mv(volts), 3) + " mV"; }

double sinc(double x) { return x == 0.0 ? 1.0 : std::sin(pi * x) / (pi * x); }

/// Least over phases within half a UI of `centre` of the sum of |x| at UI spacing, 8 UI before to
/// 119 after: what an addition of x to the pulse could do to the sum of cursors.
double sum_of_cursors(const Eigen::VectorXd& x, Eigen::Index centre, int samples_per_ui) {
  double least = std::numeric_limits<double>::infinity();
  for (int phase = -samples_per_ui / 2; phase <= samples_per_ui / 2; ++phase) {
    double sum = 0.0;
    for (int k = -8; k <= 119; ++k) {
      const Eigen::Index i = centre + phase + Eigen::Index{k} * samples_per_ui;
      if (i >= 0 && i < x.size()) sum += std::abs(x[i]);
    }
    least = std::min(least, sum);
  }
  return least;
}

/// What a record holds until `guard_ui` before the signal rises: noise, and what wrapped round its
/// end. Nothing when that leaves too little to tell.
struct Quiet {
  double rms_v = 0.0;  ///< about the mean
  double mean_v = 0.0;
};

Quiet quiet_part(const Eigen::VectorXd& samples_v, int samples_per_ui, double guard_ui) {
  Eigen::Index peak = 0;
  const double peak_v = samples_v.cwiseAbs().maxCoeff(&peak);
  Eigen::Index arrival = 0;
  while (arrival < peak && std::abs(samples_v[arrival]) < 0.05 * peak_v) ++arrival;
  const Eigen::Index length = arrival - static_cast<Eigen::Index>(guard_ui * samples_per_ui);
  if (length < Eigen::Index{4} * samples_per_ui) return {};
  const double mean_v = samples_v.head(length).mean();
  return {std::sqrt((samples_v.head(length).array() - mean_v).square().mean()), mean_v};
}

Complex launch_at(const LaunchShape& launch, double f_hz) {
  Complex value = 1.0;
  if (launch.rise_time_s) {
    const double x = pi * f_hz * *launch.rise_time_s / 1.6832;
    value *= std::exp(-2 * x * x);
  }
  if (launch.high_pass_hz) {
    const Complex x(0.0, f_hz / *launch.high_pass_hz);
    value *= x / (1.0 + x);
  }
  return value;
}

/// Nepers per hertz that the magnitude falls from the middle of the band to its top; 0 if it rises.
double fall_towards_top(const FrequencyResponse& response) {
  const Eigen::VectorXd& f = response.frequencies_hz;
  const Eigen::Index n = f.size();
  const Eigen::Index count = std::max<Eigen::Index>(1, n / 20);
  const Eigen::Index middle = std::lower_bound(f.data(), f.data() + n, 0.5 * f[n - 1]) - f.data();
  const Eigen::Index from = std::clamp<Eigen::Index>(middle - count / 2, 0, n - count);
  const double low = response.values.segment(from, count).cwiseAbs().mean();
  const double high = response.values.tail(count).cwiseAbs().mean();
  const double span_hz = f[n - count] - f[from];
  return low > high && high > 0 && span_hz > 0 ? std::log(low / high) / span_hz : 0.0;
}

/// The least divisor of samples_per_ui whose half reaches `top`, in symbol rates.
int coarse_samples_per_ui(int samples_per_ui, double top) {
  for (int divisor = 1; divisor < samples_per_ui; ++divisor) {
    if (samples_per_ui % divisor == 0 && divisor > 2 * top) return divisor;
  }
  return samples_per_ui;
}

}  // namespace

Eigen::VectorXcd launch_response(const LaunchShape& launch, const Eigen::VectorXd& frequencies_hz) {
  Eigen::VectorXcd values(frequencies_hz.size());
  for (Eigen::Index k = 0; k < values.size(); ++k) values[k] = launch_at(launch, frequencies_hz[k]);
  return values;
}

Result<ReceivedSpectrum> received_spectrum(const FrequencyResponse& response, const TimeGrid& grid,
                                           const LaunchShape& launch, std::string_view label) {
  const std::string place(label);
  if (const auto found = fault(grid, place)) return failure<ReceivedSpectrum>(*found);
  const auto is_bad = [](const std::optional<double>& x, bool zero_is_good) {
    return x && !(std::isfinite(*x) && (zero_is_good ? *x >= 0 : *x > 0));
  };
  if (is_bad(launch.rise_time_s, true)) {
    return failure<ReceivedSpectrum>(error_at(
        place, 0, "found a rise time of " + exact(*launch.rise_time_s) + " s; wanted 0 or more"));
  }
  if (is_bad(launch.high_pass_hz, false)) {
    return failure<ReceivedSpectrum>(error_at(
        place, 0,
        "found an AC-coupling corner of " + exact(*launch.high_pass_hz) + " Hz; wanted above 0"));
  }
  if (grid.samples_per_ui < 2) {
    return failure<ReceivedSpectrum>(
        error_at(place, 0, "found 1 sample per UI; a frequency response wants 2 or more"));
  }
  // An empty grid asks only whether the response can be used at all.
  const Result<Eigen::VectorXcd> checked = interpolate(response, Eigen::VectorXd(0), label);
  if (!checked) return {std::nullopt, checked.notes};

  const Eigen::VectorXd& f = response.frequencies_hz;
  const Eigen::Index n = f.size();
  const double top_hz = f[n - 1];
  const double delay_s = bulk_delay_s(response);
  const int m = grid.samples_per_ui;

  // Whole UI, as long as the data resolve, and room for the delay and its echoes.
  std::vector<double> steps(static_cast<std::size_t>(n - 1));
  for (Eigen::Index k = 0; k + 1 < n; ++k) steps[static_cast<std::size_t>(k)] = f[k + 1] - f[k];
  std::nth_element(steps.begin(), steps.begin() + (n - 1) / 2, steps.end());
  const double step_hz = steps[static_cast<std::size_t>((n - 1) / 2)];
  double wanted_ui = std::max({std::ceil(1 / (step_hz * grid.ui_s) - 1e-6),
                               kLeadInUi + static_cast<double>(grid.min_num_ui),
                               kLeadInUi + 64 + 4 * std::max(0.0, delay_s) / grid.ui_s});
  if (launch.high_pass_hz) {  // its tail falls by e^-7 in 7 time constants
    wanted_ui = std::max(wanted_ui, 7 / (2 * pi * *launch.high_pass_hz * grid.ui_s));
  }
  const double largest_ui = static_cast<double>(kLargestRecord / m);
  Result<ReceivedSpectrum> result;
  result.notes = checked.notes;
  if (wanted_ui > largest_ui) {
    result.notes.push_back(warning_at(place, 0,
                                      "a record of " + significant(wanted_ui, 4) +
                                          " UI was cut to " + significant(largest_ui, 4) +
                                          " UI; what is later wraps round to its start"));
    wanted_ui = largest_ui;
  }
  const Eigen::Index num_ui = quick_transform_size(static_cast<Eigen::Index>(wanted_ui));

  ReceivedSpectrum out;
  out.samples_per_ui = m;
  out.ui_s = grid.ui_s;
  out.num_samples = num_ui * m;
  out.start_s = -kLeadInUi * grid.ui_s;
  const Eigen::Index num_bins = out.num_samples / 2 + 1;
  const double df = out.df_hz();
  // The taper ends at the grid's own top at the latest.
  const double nyquist_hz = 0.5 * m / grid.ui_s;
  const double cut_hz = std::min(top_hz, nyquist_hz / (1 + kTaperShare));
  const Eigen::Index num_inside =
      std::min(num_bins, static_cast<Eigen::Index>(std::floor(top_hz / df * (1 + 1e-12))) + 1);

  const Eigen::VectorXd inside_hz =
      Eigen::VectorXd::LinSpaced(num_inside, 0.0, static_cast<double>(num_inside - 1) * df)
          .cwiseMin(top_hz);
  const Result<Eigen::VectorXcd> inside = interpolate(response, inside_hz, label);
  out.values = Eigen::VectorXcd::Zero(num_bins);

  // Above the data: the last value with the bulk delay under the taper; and, only to estimate what
  // is missing, the loss of the upper half of the band carried on.
  const Complex last = response.values[n - 1] * std::polar(1.0, 2 * pi * top_hz * delay_s);
  const double fall_per_hz = fall_towards_top(response);
  const auto taper = [&](double f_hz) {
    const double share = (f_hz - cut_hz) / (kTaperShare * cut_hz);
    return share <= 0 ? 1.0 : share < 1 ? 0.5 * (1 + std::cos(pi * share)) : 0.0;
  };
  // Launch: flat pulse of one UI, edge filter, AC coupling; in DFT coefficients (divided by dt).
  const auto pulse_at = [&](double f_hz) {
    const double phase = -pi * f_hz * (grid.ui_s - 2 * out.start_s);
    return m * sinc(f_hz * grid.ui_s) * std::polar(1.0, phase) * launch_at(launch, f_hz);
  };
  const Eigen::Index num_kept = std::min(
      num_bins, static_cast<Eigen::Index>(std::floor((1 + kTaperShare) * cut_hz / df)) + 1);
  for (Eigen::Index k = 0; k < num_kept; ++k) {
    const double f_hz = static_cast<double>(k) * df;
    const Complex value =
        k < num_inside ? (*inside.value)[k] : last * std::polar(1.0, -2 * pi * f_hz * delay_s);
    out.values[k] = value * taper(f_hz) * pulse_at(f_hz);
  }
  out.values[0] = out.values[0].real();
  if (out.num_samples % 2 == 0) out.values[num_bins - 1] = out.values[num_bins - 1].real();

  // What the taper takes away and the data do not hold, as far as four times the symbol rate.
  const int coarse = coarse_samples_per_ui(m, std::min(0.5 * m, 4.0));
  const Eigen::Index num_coarse = num_ui * coarse;
  const Eigen::Index num_seen = std::min(num_bins, num_coarse / 2);
  Eigen::VectorXcd missing = Eigen::VectorXcd::Zero(num_coarse / 2 + 1);
  double energy_kept = out.values.squaredNorm(), energy_missing = 0.0;
  for (Eigen::Index k = static_cast<Eigen::Index>(cut_hz / df); k < num_seen; ++k) {
    const double f_hz = static_cast<double>(k) * df;
    const Complex value =
        k < num_inside
            ? (*inside.value)[k]
            : last * std::polar(std::exp(-fall_per_hz * (f_hz - top_hz)), -2 * pi * f_hz * delay_s);
    const Complex lost = value * pulse_at(f_hz) - out.values[k];
    energy_missing += std::norm(lost);
    const double x = f_hz * grid.ui_s / 0.75;  // a receiver of three quarters of the symbol rate
    missing[k] = lost * (static_cast<double>(coarse) / m) / std::sqrt(1 + std::pow(x, 8));
  }
  out.energy_above_last_point =
      energy_missing > 0 ? energy_missing / (energy_kept + energy_missing) : 0.0;

  // The band is narrow against the grid, so fewer samples show as much.
  const int few = coarse_samples_per_ui(m, (1 + kTaperShare) * cut_hz * grid.ui_s);
  const Eigen::VectorXd samples_v = real_record(
      out.values.head(num_ui * few / 2 + 1) * (static_cast<double>(few) / m), num_ui * few);
  Eigen::Index peak = 0;
  const double peak_v = samples_v.cwiseAbs().maxCoeff(&peak);
  if (f[0] > 0 && !response.ac_coupled) {
    // A band of f_1 that is off by d shifts cursors by up to 2 f_1 T d each over 1 / f_1; some 128
    // of them count, and together at most d.
    const double at_dc = (*inside.value)[0].real();
    const double size_v = std::abs(std::abs(at_dc) - std::abs(response.values[0])) *
                          std::min(1.0, 2 * 128 * f[0] * grid.ui_s);
    if (size_v > kWorthTelling * peak_v) {
      result.notes.push_back(warning_at(place, 0,
                                        "below the first point, " + significant(f[0] * 1e-6, 4) +
                                            " MHz, the response is extrapolated to " +
                                            significant(at_dc, 4) +
                                            " at DC; all of that is worth " + mv(size_v) +
                                            " of the sum of cursors at 1 V launch"));
    }
  }
  if (out.energy_above_last_point > 1e-5) {
    const double size_v =
        sum_of_cursors(real_record(missing, num_coarse), peak * coarse / few, coarse);
    if (size_v > kWorthTelling * peak_v) {
      result.notes.push_back(warning_at(
          place, 0,
          "about " + significant(100 * out.energy_above_last_point, 2) +
              " % of the pulse's energy lies above the last point, " +
              significant(hz_to_ghz(cut_hz), 4) + " GHz; it could move the sum of cursors by " +
              mv(size_v) + " at 1 V launch, seen through a receiver of 0.75 of the symbol rate"));
    }
  }
  // The taper rings for about one over its width to both sides of an edge.
  const Quiet quiet =
      quiet_part(samples_v, few, std::max(8.0, 2 / (kTaperShare * cut_hz * grid.ui_s)));
  out.record_noise_v = quiet.rms_v;
  if (std::abs(quiet.mean_v) > 1e-3 * peak_v) {
    result.notes.push_back(
        warning_at(place, 0,
                   "the response has not died away in a record of " +
                       significant(static_cast<double>(num_ui) * grid.ui_s * 1e9, 4) +
                       " ns: " + mv(quiet.mean_v) + " is left at 1 V launch, on every cursor"));
  }
  if (quiet.rms_v > 1e-3 * peak_v) {
    // The mean of |x| of Gaussian noise is sqrt(2/pi) of its RMS.
    result.notes.push_back(
        warning_at(place, 0,
                   "the record carries noise of " + mv(quiet.rms_v) +
                       " RMS at 1 V launch before the signal arrives; a span of 100 UI makes " +
                       mv(100 * std::sqrt(2 / pi) * quiet.rms_v) + " of it"));
  }
  result.value = std::move(out);
  return result;
}

Result<ReceivedSpectrum> received_spectrum(const PulseResponse& at_1v, const TimeGrid& grid,
                                           std::string_view label) {
  const std::string place(label);
  if (const auto found = fault(grid, place)) return failure<ReceivedSpectrum>(*found);
  if (std::abs(at_1v.ui_s() / grid.ui_s - 1) > 1e-9) {
    return failure<ReceivedSpectrum>(error_at(
        place, 0,
        "the pulse was taken with a unit interval of " + significant(s_to_ps(at_1v.ui_s()), 7) +
            " ps; wanted the link's, " + significant(s_to_ps(grid.ui_s), 7) + " ps"));
  }
  Result<ReceivedSpectrum> result;
  Eigen::VectorXd samples_v = at_1v.samples_v();
  int m = at_1v.samples_per_ui();
  if (m > 1 && m < 4) {
    result.notes.push_back(
        warning_at(place, 0,
                   "found " + std::to_string(m) +
                       " samples per UI; fewer than 4 hardly show the pulse between them"));
  }
  if (m > 1 && m != grid.samples_per_ui) {
    // The pulse is 0 on both sides of its record; a few zeros let the spline know.
    constexpr Eigen::Index kMargin = 8;
    Eigen::VectorXd padded = Eigen::VectorXd::Zero(samples_v.size() + 2 * kMargin);
    padded.segment(kMargin, samples_v.size()) = samples_v;
    const boost::math::interpolators::cardinal_quintic_b_spline<double> spline(
        padded.data(), static_cast<std::size_t>(padded.size()), 0.0, 1.0);
    const double stride = static_cast<double>(m) / grid.samples_per_ui;
    Eigen::VectorXd resampled(
        static_cast<Eigen::Index>(static_cast<double>(samples_v.size() - 1) / stride) + 1);
    for (Eigen::Index i = 0; i < resampled.size(); ++i) {
      resampled[i] = spline(kMargin + static_cast<double>(i) * stride);
    }
    samples_v = std::move(resampled);
    m = grid.samples_per_ui;
  }
  const double peak_v = samples_v.cwiseAbs().maxCoeff();
  const Eigen::Index last_ui = std::min<Eigen::Index>(m, samples_v.size());
  const double left_v = samples_v.tail(last_ui).cwiseAbs().maxCoeff();
  if (m > 1 && left_v > 0.01 * peak_v) {
    result.notes.push_back(warning_at(
        place, 0,
        "the record ends while the pulse still stands at " + mv(left_v) +
            " at 1 V launch; what follows is taken as 0, and each UI of it is worth as much"));
  }

  ReceivedSpectrum out;
  out.samples_per_ui = m;
  out.ui_s = grid.ui_s;
  const Eigen::Index num_ui = quick_transform_size(
      std::max<Eigen::Index>((samples_v.size() + m - 1) / m + kTailUi, grid.min_num_ui));
  out.num_samples = num_ui * m;
  Eigen::VectorXd record = Eigen::VectorXd::Zero(out.num_samples);
  record.head(samples_v.size()) = samples_v;
  out.record_noise_v = m > 1 ? quiet_part(samples_v, m, 1.0).rms_v : 0.0;
  out.values = real_spectrum(record);
  result.value = std::move(out);
  return result;
}

}  // namespace tapwright
