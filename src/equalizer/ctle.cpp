#include "tapwright/equalizer/ctle.hpp"

#include <algorithm>
#include <boost/math/quadrature/exp_sinh.hpp>
#include <boost/math/quadrature/gauss_kronrod.hpp>
#include <cmath>
#include <limits>
#include <numbers>
#include <stdexcept>

#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

using Complex = std::complex<double>;
constexpr Complex kJ(0.0, 1.0);

/// (gain + jf/zero) / (1 + jf/pole), written out: a complex division otherwise looks after infinities.
Complex section(double gain, double zero_turn, double pole_turn) {
  const double scale = 1.0 / (1.0 + pole_turn * pole_turn);
  return {(gain + zero_turn * pole_turn) * scale, (zero_turn - gain * pole_turn) * scale};
}
Complex times(Complex a, Complex b) {
  return {a.real() * b.real() - a.imag() * b.imag(), a.real() * b.imag() + a.imag() * b.real()};
}

/// The reference form with its decibels converted once.
class ReferenceCurve {
 public:
  explicit ReferenceCurve(const CtleReference& form)
      : form_(form), dc_gain_(amplitude_db_to_ratio(form.dc_gain_db)) {
    if (form.low_frequency) low_gain_ = amplitude_db_to_ratio(form.low_frequency->dc_gain_db);
  }
  [[nodiscard]] Complex at(double f_hz) const {
    const Complex h = times(section(dc_gain_, f_hz / form_.f_z_hz, f_hz / form_.f_p1_hz),
                            section(1.0, 0.0, f_hz / form_.f_p2_hz));
    if (!form_.low_frequency) return h;
    const double turn = f_hz / form_.low_frequency->f_lf_hz;
    return times(h, section(low_gain_, turn, turn));
  }

 private:
  CtleReference form_;
  double dc_gain_;
  double low_gain_ = 1.0;
};

Complex value_at(const CtleReference& form, double f_hz) { return ReferenceCurve(form).at(f_hz); }

Complex value_at(const CtleZerosPoles& form, double f_hz) {
  Complex h = form.gain;
  for (const Complex& zero : form.zeros_hz) h *= 1.0 + kJ * f_hz / zero;
  for (const Complex& pole : form.poles_hz) h /= 1.0 + kJ * f_hz / pole;
  return h;
}

Complex butterworth_at(double bandwidth_hz, double f_hz) {
  const double x = f_hz / bandwidth_hz;
  return 1.0 / Complex(1.0 - 3.414214 * x * x + x * x * x * x, 2.613126 * (x - x * x * x));
}

/// Magnitude and unwrapped phase of a measured response, ready for interpolation.
class MeasuredCurve {
 public:
  explicit MeasuredCurve(const CtleMeasured& form) : f_hz_(form.frequencies_hz) {
    if (f_hz_.size() == 0 || f_hz_.size() != form.values.size()) {
      throw std::invalid_argument("CtleMeasured: needs as many values as frequencies, at least one");
    }
    magnitude_ = form.values.cwiseAbs();
    phase_ = form.values.cwiseArg();
    for (Eigen::Index i = 1; i < phase_.size(); ++i) {
      phase_[i] = phase_[i - 1] +
                  std::remainder(phase_[i] - phase_[i - 1], 2.0 * std::numbers::pi);
    }
  }
  [[nodiscard]] Complex at(double f_hz) const {
    const auto* begin = f_hz_.data();
    const auto* end = begin + f_hz_.size();
    const Eigen::Index above = std::upper_bound(begin, end, f_hz) - begin;
    if (above == 0) return held(0, f_hz);
    if (above == f_hz_.size()) return std::polar(magnitude_[above - 1], phase_[above - 1]);
    const double share = (f_hz - f_hz_[above - 1]) / (f_hz_[above] - f_hz_[above - 1]);
    return std::polar(std::lerp(magnitude_[above - 1], magnitude_[above], share),
                      std::lerp(phase_[above - 1], phase_[above], share));
  }

 private:
  /// Below the first point: magnitude held, phase going to the nearest multiple of pi at DC, so
  /// that the impulse response stays real.
  [[nodiscard]] Complex held(Eigen::Index i, double f_hz) const {
    const double at_dc = std::numbers::pi * std::round(phase_[i] / std::numbers::pi);
    const double share = f_hz_[i] > 0.0 ? std::max(0.0, f_hz / f_hz_[i]) : 1.0;
    return std::polar(magnitude_[i], std::lerp(at_dc, phase_[i], share));
  }
  Eigen::VectorXd f_hz_, magnitude_, phase_;
};

double gain_of(const CtleState& state) { return state.gain ? state.gain->value : 1.0; }

}  // namespace

Eigen::VectorXcd response(const CtleState& state, const Eigen::VectorXd& frequencies_hz) {
  const double gain = gain_of(state);
  Eigen::VectorXcd out(frequencies_hz.size());
  if (const auto* measured = std::get_if<CtleMeasured>(&state.response)) {
    const MeasuredCurve curve(*measured);
    for (Eigen::Index i = 0; i < out.size(); ++i) out[i] = gain * curve.at(frequencies_hz[i]);
  } else if (const auto* reference = std::get_if<CtleReference>(&state.response)) {
    const ReferenceCurve curve(*reference);
    for (Eigen::Index i = 0; i < out.size(); ++i) {
      out[i] = gain * curve.at(frequencies_hz[i]);
    }
  } else {
    const auto& listed = std::get<CtleZerosPoles>(state.response);
    for (Eigen::Index i = 0; i < out.size(); ++i) {
      out[i] = gain * value_at(listed, frequencies_hz[i]);
    }
  }
  return out;
}

Eigen::VectorXcd noise_filter_response(double bandwidth_hz, const Eigen::VectorXd& frequencies_hz) {
  Eigen::VectorXcd out(frequencies_hz.size());
  for (Eigen::Index i = 0; i < out.size(); ++i) {
    out[i] = butterworth_at(bandwidth_hz, frequencies_hz[i]);
  }
  return out;
}

double filtered_noise_v(double density_v2_per_hz, std::optional<double> bandwidth_hz,
                        const CtleState& state) {
  using boost::math::quadrature::exp_sinh;
  using boost::math::quadrature::gauss_kronrod;
  constexpr double kTolerance = 1e-10;

  const auto filter_power = [&](double f_hz) {
    return bandwidth_hz ? std::norm(butterworth_at(*bandwidth_hz, f_hz)) : 1.0;
  };
  double integral_hz = 0.0;
  if (const auto* measured = std::get_if<CtleMeasured>(&state.response)) {
    if (!bandwidth_hz) {
      throw std::invalid_argument(
          "filtered_noise_v: a measured CTLE response needs a noise filter to bound the noise");
    }
    const MeasuredCurve curve(*measured);
    const auto power = [&](double f_hz) {
      return std::norm(curve.at(f_hz)) * filter_power(f_hz);
    };
    // The curve has a kink at every point, so each interval is integrated by itself.
    double from_hz = 0.0;
    for (const double to_hz : measured->frequencies_hz) {
      if (to_hz <= from_hz) continue;
      integral_hz += gauss_kronrod<double, 15>::integrate(power, from_hz, to_hz, 0);
      from_hz = to_hz;
    }
    const double scale_hz = std::max(*bandwidth_hz, from_hz);
    integral_hz += scale_hz * exp_sinh<double>().integrate(
                                  [&](double u) { return power(from_hz + scale_hz * u); },
                                  kTolerance);
  } else {
    double scale_hz = bandwidth_hz.value_or(0.0);
    if (const auto* reference = std::get_if<CtleReference>(&state.response)) {
      if (!bandwidth_hz) scale_hz = std::max(reference->f_p1_hz, reference->f_p2_hz);
    } else if (!bandwidth_hz) {
      const auto& listed = std::get<CtleZerosPoles>(state.response);
      if (listed.poles_hz.size() <= listed.zeros_hz.size()) {
        throw std::invalid_argument(
            "filtered_noise_v: without a noise filter the CTLE needs more poles than zeros");
      }
      for (const Complex& pole : listed.poles_hz) scale_hz = std::max(scale_hz, std::abs(pole));
    }
    const auto power = [&](double f_hz) {
      const Complex h = std::holds_alternative<CtleReference>(state.response)
                            ? value_at(std::get<CtleReference>(state.response), f_hz)
                            : value_at(std::get<CtleZerosPoles>(state.response), f_hz);
      return std::norm(h) * filter_power(f_hz);
    };
    // Far beyond every corner the polynomials overflow; the integrand is 0 there.
    integral_hz = scale_hz * exp_sinh<double>().integrate(
                                 [&](double u) {
                                   const double p = u < 1e30 ? power(scale_hz * u) : 0.0;
                                   return std::isfinite(p) ? p : 0.0;
                                 },
                                 kTolerance);
  }
  return gain_of(state) * std::sqrt(density_v2_per_hz * integral_hz);
}

}  // namespace tapwright
