#include "tapwright/channel/frequency_response.hpp"

#include <algorithm>
#include <cmath>
#include <complex>
#include <numbers>
#include <numeric>
#include <stdexcept>
#include <string>
#include <vector>

#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

using std::numbers::pi;
using Complex = std::complex<double>;

/// A phase that runs forward by more than this share of a turn per step means an aliased delay;
/// less may come from a de-embedded fixture.
constexpr double kForwardTurnsAllowed = 2e-3;

std::optional<std::string> fault(const FrequencyResponse& response) {
  const Eigen::VectorXd& f = response.frequencies_hz;
  if (f.size() != response.values.size()) {
    return "found " + std::to_string(f.size()) + " frequencies and " +
           std::to_string(response.values.size()) + " values; wanted as many of each";
  }
  if (f.size() < 2) {
    return "found " + std::to_string(f.size()) + " frequency point(s); wanted at least 2";
  }
  for (Eigen::Index k = 0; k < f.size(); ++k) {
    if (!std::isfinite(f[k]) || f[k] < 0 || (k > 0 && f[k] <= f[k - 1])) {
      return "frequency " + exact(f[k]) + " Hz at point " + std::to_string(k + 1) +
             "; wanted finite frequencies that rise from 0 or more";
    }
    if (!std::isfinite(response.values[k].real()) || !std::isfinite(response.values[k].imag())) {
      return "the response is not a finite number at " + exact(f[k]) + " Hz";
    }
  }
  return std::nullopt;
}

/// ln|H| = intercept + slope sqrt(f) over the lowest points.
struct LowFit {
  double at_dc = 1.0;    ///< exp(intercept)
  double rise_db = 0.0;  ///< of the fit, from DC to the first point; > 0 looks AC-coupled
};

LowFit fit_low_end(const Eigen::VectorXd& f, const Eigen::VectorXd& magnitude) {
  // Ten points even out noise and ripple; a decade is as far as one law holds.
  double n = 0, sx = 0, sy = 0, sxx = 0, sxy = 0;
  for (Eigen::Index k = 0; k < std::min<Eigen::Index>(10, f.size()); ++k) {
    if ((k >= 2 && f[k] > 10.5 * f[0]) || magnitude[k] <= 0) break;
    const double x = std::sqrt(f[k] / f[0]);
    const double y = std::log(magnitude[k]);
    n += 1, sx += x, sy += y, sxx += x * x, sxy += x * y;
  }
  if (n < 2) return {magnitude[0], 0.0};
  const double slope = (n * sxy - sx * sy) / (n * sxx - sx * sx);
  return {std::exp((sy - slope * sx) / n), 20.0 / std::log(10.0) * slope};
}

}  // namespace

double bulk_delay_s(const FrequencyResponse& response) {
  const Eigen::VectorXd& f = response.frequencies_hz;
  const Eigen::VectorXcd& h = response.values;
  if (f.size() < 2 || h.size() != f.size()) {
    throw std::invalid_argument("bulk_delay_s: wanted at least two points");
  }
  // Narrow steps first: they settle the delay well enough to count the turns of wider ones.
  std::vector<Eigen::Index> order(static_cast<std::size_t>(f.size() - 1));
  std::iota(order.begin(), order.end(), Eigen::Index{0});
  const auto step = [&](Eigen::Index k) { return f[k + 1] - f[k]; };
  const double narrowest = step(*std::min_element(
      order.begin(), order.end(), [&](auto a, auto b) { return step(a) < step(b); }));
  const auto wide = std::stable_partition(order.begin(), order.end(),
                                          [&](auto k) { return step(k) <= 1.2 * narrowest; });
  std::stable_sort(wide, order.end(), [&](auto a, auto b) { return step(a) < step(b); });

  Complex turn = 0;
  double mean_step = 0, weight_sum = 0;
  for (auto k = order.begin(); k != wide; ++k) {
    const Complex product = h[*k + 1] * std::conj(h[*k]);
    turn += product;
    mean_step += std::abs(product) * step(*k);
    weight_sum += std::abs(product);
  }
  if (weight_sum <= 0) return 0.0;
  mean_step /= weight_sum;
  double delay_s = -std::arg(turn) / (2 * pi * mean_step);
  double moment = weight_sum * mean_step * mean_step;
  for (auto k = wide; k != order.end(); ++k) {
    const Complex product = h[*k + 1] * std::conj(h[*k]);
    const double rest = std::arg(product * std::polar(1.0, 2 * pi * step(*k) * delay_s));
    const double gain = std::abs(product) * step(*k);
    moment += gain * step(*k);
    delay_s -= gain * rest / (2 * pi * moment);
  }
  return delay_s;
}

Result<Eigen::VectorXcd> interpolate(const FrequencyResponse& response,
                                     const Eigen::VectorXd& frequencies_hz,
                                     std::string_view label) {
  const std::string place(label);
  if (const auto found = fault(response)) {
    return failure<Eigen::VectorXcd>(error_at(place, 0, *found));
  }
  const Eigen::VectorXd& f = response.frequencies_hz;
  const Eigen::Index n = f.size();
  const double delay_s = bulk_delay_s(response);
  const double widest = (f.tail(n - 1) - f.head(n - 1)).maxCoeff();
  const double turns = delay_s * widest;
  if (turns >= 0.5 || turns < -kForwardTurnsAllowed) {
    // Phase that runs forward is a delay of more than half a turn per step, seen short by a turn.
    const double least_s = turns < 0 ? delay_s + 1.0 / widest : delay_s;
    return failure<Eigen::VectorXcd>(error_at(
        place, 0,
        "frequency step " + significant(widest * 1e-6, 6) + " MHz is too coarse for a delay of " +
            significant(least_s * 1e9, 4) + " ns; wanted a step under 1 / (2 delay) = " +
            significant(0.5e-6 / least_s, 4) + " MHz"));
  }

  // Magnitude and the phase left after the bulk delay, unwrapped.
  Eigen::VectorXd magnitude(n), phase(n);
  for (Eigen::Index k = 0; k < n; ++k) {
    const Complex rest = response.values[k] * std::polar(1.0, 2 * pi * f[k] * delay_s);
    magnitude[k] = std::abs(rest);
    phase[k] = std::arg(rest);
    if (k > 0) phase[k] -= 2 * pi * std::round((phase[k] - phase[k - 1]) / (2 * pi));
  }

  Result<Eigen::VectorXcd> result;
  double dc_magnitude = 0.0;
  double dc_phase = phase[0];
  if (f[0] > 0 && !response.ac_coupled) {
    const LowFit low = fit_low_end(f, magnitude);
    dc_magnitude = low.at_dc;
    if (low.rise_db > 3.0) {
      result.notes.push_back(warning_at(
          place, 0,
          "the response falls by " + fixed(low.rise_db, 1) + " dB from " +
              significant(f[0] * 1e-6, 4) + " MHz to the DC value found by extrapolation, " +
              significant(low.at_dc, 3) + "; if the path is AC-coupled, say so"));
      dc_magnitude = std::min(dc_magnitude, magnitude[0]);
    }
    // The skin effect's phase goes as sqrt(f), so it is straight against sqrt(f) like ln|H|.
    const double reach = std::sqrt(f[1] / f[0]);
    const double at_dc = phase[0] - (phase[1] - phase[0]) / (reach - 1.0);
    dc_phase = pi * std::round((std::abs(at_dc - phase[0]) < pi / 2 ? at_dc : phase[0]) / pi);
  }

  Eigen::VectorXcd values(frequencies_hz.size());
  Eigen::Index k = 0;
  for (Eigen::Index i = 0; i < values.size(); ++i) {
    const double x_hz = frequencies_hz[i];
    while (k + 2 < n && x_hz > f[k + 1]) ++k;
    Complex rest;
    if (x_hz > f[n - 1]) {
      values[i] = 0.0;
      continue;
    }
    if (x_hz < f[0]) {
      const double share = response.ac_coupled ? x_hz / f[0] : std::sqrt(x_hz / f[0]);
      const double size = response.ac_coupled || dc_magnitude <= 0 || magnitude[0] <= 0
                              ? std::lerp(dc_magnitude, magnitude[0], share)
                              : dc_magnitude * std::pow(magnitude[0] / dc_magnitude, share);
      rest = std::polar(size, std::lerp(dc_phase, phase[0], share));
    } else {
      const double share = (x_hz - f[k]) / (f[k + 1] - f[k]);
      if (std::abs(phase[k + 1] - phase[k]) < pi / 2) {
        rest = std::polar(std::lerp(magnitude[k], magnitude[k + 1], share),
                          std::lerp(phase[k], phase[k + 1], share));
      } else {
        rest = (1.0 - share) * std::polar(magnitude[k], phase[k]) +
               share * std::polar(magnitude[k + 1], phase[k + 1]);
      }
    }
    values[i] = rest * std::polar(1.0, -2 * pi * x_hz * delay_s);
  }
  result.value = std::move(values);
  return result;
}

}  // namespace tapwright
