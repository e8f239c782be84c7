#include "tapwright/channel/line_model.hpp"

#include <algorithm>
#include <cmath>
#include <complex>
#include <numbers>
#include <stdexcept>
#include <string>
#include <utility>

#include "tapwright/base/text.hpp"
#include "tapwright/base/units.hpp"

namespace tapwright {
namespace {

using std::numbers::pi;
using Complex = std::complex<double>;

constexpr double kMu0 = 4e-7 * pi;
constexpr double kEta0 = kMu0 * kSpeedOfLightMPerS;

/// Impedance with air everywhere, and the share of the field's energy in the dielectric.
struct Geometry {
  double z_air_ohm = 0.0;
  double filling = 1.0;  ///< eps_eff = 1 + filling (eps_r - 1), at low frequencies
};

/// Kirschning and Jansen 1982 (constants from memory): eps_eff moves from its static value towards
/// eps_r by P / (1 + P); so the filling moves towards 1.
double filling_at(const Microstrip& strip, double filling, double eps_r, double f) {
  const double u = strip.width_m / strip.height_m;
  const double fh = f * 1e-9 * strip.height_m * 1e3;  // GHz mm
  const double p1 = 0.27488 + (0.6315 + 0.525 / std::pow(1 + 0.0157 * fh, 20)) * u -
                    0.065683 * std::exp(-8.7513 * u);
  const double p2 = 0.33622 * (1 - std::exp(-0.03442 * eps_r));
  const double p3 = 0.0363 * std::exp(-4.6 * u) * (1 - std::exp(-std::pow(fh / 38.7, 4.97)));
  const double p4 = 1 + 2.751 * (1 - std::exp(-std::pow(eps_r / 15.916, 8)));
  const double p = p1 * p2 * std::pow((0.1844 + p3 * p4) * fh, 1.5763);
  return 1 - (1 - filling) / (1 + p);
}

template <class Homogeneous>
double filling_at(const Homogeneous& /*shape*/, double filling, double /*eps_r*/, double /*f*/) {
  return filling;
}

/// Hammerstad and Jensen 1980: impedance of a strip of u = width / height in air, eq. (1).
double microstrip_air_ohm(double u) {
  const double fu = 6 + (2 * pi - 6) * std::exp(-std::pow(30.666 / u, 0.7528));
  return kEta0 / (2 * pi) * std::log(fu / u + std::sqrt(1 + 4 / (u * u)));
}

/// The same source's eqs. (2) to (4): effective permittivity.
double microstrip_eps_eff(double u, double eps_r) {
  const double a =
      1 + std::log((std::pow(u, 4) + std::pow(u / 52, 2)) / (std::pow(u, 4) + 0.432)) / 49 +
      std::log(1 + std::pow(u / 18.1, 3)) / 18.7;
  const double b = 0.564 * std::pow((eps_r - 0.9) / (eps_r + 3), 0.053);
  return (eps_r + 1) / 2 + (eps_r - 1) / 2 * std::pow(1 + 10 / u, -a * b);
}

/// Every metal surface moved back by `recession_m`: what the incremental-inductance rule asks.
Geometry solve(const Microstrip& strip, double eps_r, double recession_m) {
  const double w = strip.width_m - 2 * recession_m;
  const double h = strip.height_m + 2 * recession_m;
  const double t = std::max(0.0, strip.thickness_m - 2 * recession_m) / h;
  const double u = w / h;
  double du_air = 0.0, du = 0.0;  // thickness as extra width, eqs. (6) and (7)
  if (t > 0) {
    const double coth = 1 / std::tanh(std::sqrt(6.517 * u));
    du_air = t / pi * std::log(1 + 4 * std::numbers::e / (t * coth * coth));
    du = 0.5 * (1 + 1 / std::cosh(std::sqrt(std::max(0.0, eps_r - 1)))) * du_air;
  }
  Geometry out;
  out.z_air_ohm = microstrip_air_ohm(u + du_air);
  if (eps_r > 1) {
    const double ratio = microstrip_air_ohm(u + du_air) / microstrip_air_ohm(u + du);
    const double eps_eff = microstrip_eps_eff(u + du, eps_r) * ratio * ratio;
    out.filling = (eps_eff - 1) / (eps_r - 1);
  }
  return out;
}

Geometry solve(const Stripline& strip, double /*eps_r*/, double recession_m) {
  // Wheeler 1978: a strip of thickness t between planes b apart; exact to 0.5 %.
  const double w = strip.width_m - 2 * recession_m;
  const double b = strip.plane_spacing_m + 2 * recession_m;
  const double t = std::max(1e-9 * b, strip.thickness_m - 2 * recession_m);
  const double x = t / b;
  const double m = 2 / (1 + 2.0 / 3.0 * x / (1 - x));
  const double corner = std::pow(x / (2 - x), 2) + std::pow(0.0796 * x / (w / b + 1.1 * x), m);
  const double ratio = (b - t) / (w + t / pi * (1 - 0.5 * std::log(corner)));
  const double y = 8 / pi * ratio;
  return {30 * std::log(1 + 4 / pi * ratio * (y + std::sqrt(y * y + 6.27))), 1.0};
}

Geometry solve(const WirePair& pair, double /*eps_r*/, double recession_m) {
  return {kEta0 / pi * std::acosh(pair.spacing_m / (pair.diameter_m - 2 * recession_m)), 1.0};
}

Geometry solve(const Coax& coax, double /*eps_r*/, double recession_m) {
  return {kEta0 / (2 * pi) *
              std::log((coax.outer_diameter_m + 2 * recession_m) /
                       (coax.inner_diameter_m - 2 * recession_m)),
          1.0};
}

/// One over the cross-section that carries direct current; planes and shields count as infinite.
double dc_resistance_factor_per_m2(const Microstrip& s) { return 1 / (s.width_m * s.thickness_m); }
double dc_resistance_factor_per_m2(const Stripline& s) { return 1 / (s.width_m * s.thickness_m); }
double dc_resistance_factor_per_m2(const WirePair& s) {
  return 2 / (pi / 4 * s.diameter_m * s.diameter_m);
}
double dc_resistance_factor_per_m2(const Coax& s) {
  return 1 / (pi / 4 * s.inner_diameter_m * s.inner_diameter_m);
}

double smallest_dimension_m(const Microstrip& s) { return std::min(s.width_m, s.thickness_m); }
double smallest_dimension_m(const Stripline& s) { return std::min(s.width_m, s.thickness_m); }
double smallest_dimension_m(const WirePair& s) { return s.diameter_m; }
double smallest_dimension_m(const Coax& s) { return s.inner_diameter_m; }

double resistivity_ohm_m(const Conductor& c) {
  return (1 + c.temperature_coefficient_per_k * (c.temperature_c - 20)) / c.conductivity_s_per_m;
}

/// eps' - j eps'' of the wideband Debye form at one frequency, given eps_inf and slope.
struct WidebandDebye {
  double eps_inf = 1.0;
  double slope = 0.0;  ///< eps' falls by so much per factor e of frequency
  double low_hz = 1e3;
  double high_hz = 1e12;

  explicit WidebandDebye(const Dielectric& d)
      : eps_inf(d.eps_r), low_hz(d.low_corner_hz), high_hz(d.high_corner_hz) {
    if (d.tan_delta > 0) {
      const Complex term = logarithm(d.frequency_hz);
      slope = -d.eps_r * d.tan_delta / term.imag();
      eps_inf = d.eps_r - slope * term.real();
    }
  }
  [[nodiscard]] Complex logarithm(double f) const {
    return std::log(Complex(high_hz, f) / Complex(low_hz, f));
  }
  [[nodiscard]] Complex at(double f) const { return eps_inf + slope * logarithm(f); }
};

std::string wanted(std::string_view what, double found, std::string_view limits) {
  return std::string(what) + " = " + exact(found) + "; wanted " + std::string(limits);
}

class Checker {
 public:
  explicit Checker(std::string_view label) : label_(label) {}
  void positive(std::string_view what, double x) {
    if (!(std::isfinite(x) && x > 0)) fail(wanted(what, x, "a finite number above 0"));
  }
  void not_negative(std::string_view what, double x) {
    if (!(std::isfinite(x) && x >= 0)) fail(wanted(what, x, "a finite number, 0 or more"));
  }
  void below(std::string_view what, double x, std::string_view limit_name, double limit) {
    if (x >= limit) {
      fail(wanted(what, x, "less than " + std::string(limit_name) + " = " + exact(limit)));
    }
  }
  void fail(std::string text) { notes.push_back(error_at(label_, 0, "line: " + std::move(text))); }
  void warn(std::string text) {
    notes.push_back(warning_at(label_, 0, "line: " + std::move(text)));
  }

  std::vector<Diagnostic> notes;

 private:
  std::string label_;
};

void check(const AnnexLine& line, Checker& checker) {
  checker.not_negative("gamma0", line.gamma0_per_m);
  checker.not_negative("a1", line.a1_sqrt_s_per_m);
  checker.not_negative("a2", line.a2_s_per_m);
  checker.not_negative("delay per metre", line.tau_s_per_m);
  checker.positive("impedance", line.z_c_ohm);
  if (line.dispersion) {
    checker.not_negative("rise of the permittivity", line.dispersion->rise);
    checker.positive("knee of the dispersion", line.dispersion->knee_hz);
  }
}

void check(const DatasheetLine& line, Checker& checker) {
  checker.positive("impedance", line.impedance_ohm);
  checker.positive("delay per metre", line.delay_s_per_m);
  if (line.loss.size() < 2) {
    checker.fail("found the loss at " + std::to_string(line.loss.size()) +
                 " frequencies; wanted two or more");
  }
  double last_hz = 0.0;
  for (const auto& point : line.loss) {
    checker.positive("frequency of a loss", point.frequency_hz);
    checker.not_negative("loss per metre", point.loss_db_per_m);
    if (point.frequency_hz <= last_hz) {
      checker.fail(wanted("frequency of a loss", point.frequency_hz,
                          "rising frequencies, after " + exact(last_hz)));
    }
    last_hz = point.frequency_hz;
  }
  if (!checker.notes.empty()) return;
  const AnnexLine fit = to_annex_line(line);
  double worst_db = 0.0, worst_hz = 0.0, total_db = 0.0;
  for (const auto& point : line.loss) {
    const double f = point.frequency_hz;
    const double model_db =
        ratio_to_amplitude_db(std::exp(fit.a1_sqrt_s_per_m * std::sqrt(f) + fit.a2_s_per_m * f));
    if (std::abs(model_db - point.loss_db_per_m) > worst_db) {
      worst_db = std::abs(model_db - point.loss_db_per_m);
      worst_hz = f;
    }
    total_db = std::max(total_db, point.loss_db_per_m);
  }
  if (worst_db > 0.02 * total_db) {
    checker.warn("loss = a sqrt(f) + b f with a, b >= 0 misses the data sheet by " +
                 significant(worst_db, 3) + " dB/m at " + significant(hz_to_ghz(worst_hz), 4) +
                 " GHz");
  }
}

void check(const RlgcLine& line, Checker& checker) {
  checker.not_negative("resistance per metre", line.r_ohm_per_m);
  checker.positive("inductance per metre", line.l_h_per_m);
  checker.not_negative("conductance per metre", line.g_s_per_m);
  checker.positive("capacitance per metre", line.c_f_per_m);
}

void check(const PhysicalLine& line, Checker& checker) {
  struct Sizes {
    Checker& checker;
    void operator()(const Microstrip& s) {
      checker.positive("width", s.width_m);
      checker.positive("height", s.height_m);
      checker.positive("thickness", s.thickness_m);
    }
    void operator()(const Stripline& s) {
      checker.positive("width", s.width_m);
      checker.positive("plane spacing", s.plane_spacing_m);
      checker.positive("thickness", s.thickness_m);
      checker.below("thickness", s.thickness_m, "plane spacing", s.plane_spacing_m);
    }
    void operator()(const WirePair& s) {
      checker.positive("wire diameter", s.diameter_m);
      checker.positive("wire spacing", s.spacing_m);
      checker.below("wire diameter", s.diameter_m, "wire spacing", s.spacing_m);
    }
    void operator()(const Coax& s) {
      checker.positive("inner diameter", s.inner_diameter_m);
      checker.positive("outer diameter", s.outer_diameter_m);
      checker.below("inner diameter", s.inner_diameter_m, "outer diameter", s.outer_diameter_m);
    }
  };
  std::visit(Sizes{checker}, line.geometry);
  const Conductor& c = line.conductor;
  checker.positive("conductivity", c.conductivity_s_per_m);
  if (!std::isfinite(c.temperature_c) || !std::isfinite(c.temperature_coefficient_per_k) ||
      !(1 + c.temperature_coefficient_per_k * (c.temperature_c - 20) > 0)) {
    checker.fail(wanted("temperature", c.temperature_c, "one at which the resistance is above 0"));
  }
  if (c.roughness_rms_m) checker.not_negative("roughness", *c.roughness_rms_m);
  const Dielectric& d = line.dielectric;
  if (!(std::isfinite(d.eps_r) && d.eps_r >= 1)) {
    checker.fail(wanted("dielectric constant", d.eps_r, "a finite number, 1 or more"));
  }
  checker.not_negative("loss tangent", d.tan_delta);
  checker.positive("low corner of the dielectric", d.low_corner_hz);
  checker.below("low corner of the dielectric", d.low_corner_hz, "the frequency it is given at",
                d.frequency_hz);
  checker.below("frequency of the dielectric constant", d.frequency_hz, "the high corner",
                d.high_corner_hz);
  checker.positive("high corner of the dielectric", d.high_corner_hz);
}

/// Series impedance and shunt admittance per metre.
struct Immittances {
  Eigen::VectorXcd z_ohm_per_m;
  Eigen::VectorXcd y_s_per_m;
};

Immittances immittances(const AnnexLine& line, const Eigen::VectorXd& f) {
  Eigen::VectorXcd gamma(f.size());
  for (Eigen::Index k = 0; k < f.size(); ++k) {
    double tau = line.tau_s_per_m;
    if (line.dispersion) {
      const double x = f[k] / line.dispersion->knee_hz;
      tau *= std::sqrt(1 + line.dispersion->rise * x * x / (1 + x * x));
    }
    gamma[k] =
        line.gamma0_per_m + line.a1_sqrt_s_per_m * std::sqrt(f[k]) * Complex(1, 1) +
        Complex(line.a2_s_per_m * f[k],
                2 * pi * f[k] * tau - line.a2_s_per_m * (2 / pi) * f[k] * std::log(f[k] * 1e-9));
  }
  return {gamma * line.z_c_ohm, gamma / line.z_c_ohm};
}

Immittances immittances(const DatasheetLine& line, const Eigen::VectorXd& f) {
  return immittances(to_annex_line(line), f);
}

Immittances immittances(const RlgcLine& line, const Eigen::VectorXd& f) {
  const Eigen::VectorXcd jw = Complex(0, 2 * pi) * f;
  return {(jw * line.l_h_per_m).array() + line.r_ohm_per_m,
          (jw * line.c_f_per_m).array() + line.g_s_per_m};
}

Immittances immittances(const PhysicalLine& line, const Eigen::VectorXd& f) {
  const auto solved = [&](double recession_m) {
    return std::visit(
        [&](const auto& shape) { return solve(shape, line.dielectric.eps_r, recession_m); },
        line.geometry);
  };
  const Geometry ideal = solved(0.0);
  const double l_h_per_m = ideal.z_air_ohm / kSpeedOfLightMPerS;
  const double c_air_f_per_m = 1 / (ideal.z_air_ohm * kSpeedOfLightMPerS);
  // Wheeler 1942: R = R_s / mu0 * dL/dn, n the recession of every metal surface.
  const double dn =
      1e-4 * std::visit([](const auto& s) { return smallest_dimension_m(s); }, line.geometry);
  const double dl_dn =
      (solved(dn).z_air_ohm - solved(-dn).z_air_ohm) / (2 * dn) / kSpeedOfLightMPerS;
  const double rho = resistivity_ohm_m(line.conductor);
  const double r_dc =
      rho * std::visit([](const auto& s) { return dc_resistance_factor_per_m2(s); }, line.geometry);
  const WidebandDebye dielectric(line.dielectric);

  Immittances out{Eigen::VectorXcd(f.size()), Eigen::VectorXcd(f.size())};
  for (Eigen::Index k = 0; k < f.size(); ++k) {
    const double w = 2 * pi * f[k];
    double r_hf = std::sqrt(pi * f[k] * kMu0 * rho) * dl_dn / kMu0;
    if (line.conductor.roughness_rms_m) {
      const double x = *line.conductor.roughness_rms_m / skin_depth_m(line.conductor, f[k]);
      r_hf *= 1 + 2 / pi * std::atan(1.4 * x * x);
    }
    out.z_ohm_per_m[k] =
        std::sqrt(Complex(r_dc * r_dc, 2 * r_hf * r_hf)) + Complex(0, w * l_h_per_m);
    const double filling = std::visit(
        [&](const auto& shape) {
          return filling_at(shape, ideal.filling, line.dielectric.eps_r, f[k]);
        },
        line.geometry);
    out.y_s_per_m[k] =
        Complex(0, w * c_air_f_per_m) * (1.0 + filling * (dielectric.at(f[k]) - 1.0));
  }
  return out;
}

/// DC is taken as 1 mHz: near enough for any length, and Z_c stays finite.
constexpr double kLowestHz = 1e-3;

Immittances checked_immittances(const LineModel& model, const Eigen::VectorXd& frequencies_hz) {
  for (const Diagnostic& note : check_line(model, "")) {
    if (note.severity == Diagnostic::Severity::kError) throw std::invalid_argument(note.message);
  }
  if (frequencies_hz.size() > 0 && !(frequencies_hz.minCoeff() >= 0)) {
    throw std::invalid_argument("line: frequencies must not be negative");
  }
  const Eigen::VectorXd f = frequencies_hz.cwiseMax(kLowestHz);
  return std::visit([&](const auto& line) { return immittances(line, f); }, model);
}

/// e^-x sinh(x) / x without overflow for large x or cancellation for small.
Complex damped_sinhc(Complex x) {
  if (x == 0.0) return 1.0;
  if (std::abs(x) < 1) return std::exp(-x) * std::sinh(x) / x;
  return (1.0 - std::exp(-2.0 * x)) / (2.0 * x);
}

}  // namespace

AnnexLine annex_line(double gamma0_per_mm, double a1_sqrt_ns_per_mm, double a2_ns_per_mm,
                     double tau_ns_per_mm, double z_c_ohm) {
  return {gamma0_per_mm * 1e3, a1_sqrt_ns_per_mm * std::sqrt(1e-9) * 1e3, a2_ns_per_mm * 1e-6,
          tau_ns_per_mm * 1e-6, z_c_ohm};
}

double awg_diameter_m(double gauge) { return 0.127e-3 * std::pow(92.0, (36 - gauge) / 39); }

std::vector<Diagnostic> check_line(const LineModel& model, std::string_view label) {
  Checker checker(label);
  std::visit([&](const auto& line) { check(line, checker); }, model);
  return checker.notes;
}

LineConstants line_constants(const LineModel& model, const Eigen::VectorXd& frequencies_hz) {
  const Immittances c = checked_immittances(model, frequencies_hz);
  // Roots one by one: that of the product could take the wrong branch.
  const Eigen::ArrayXcd root_z = c.z_ohm_per_m.array().sqrt(), root_y = c.y_s_per_m.array().sqrt();
  return {root_z * root_y, root_z / root_y};
}

AnnexLine to_annex_line(const DatasheetLine& sheet) {
  // Least squares for loss = a sqrt(f) + b f with a, b >= 0: the free solution, or the better of
  // the two with one of them 0.
  double xx = 0, xy = 0, yy = 0, xl = 0, yl = 0;
  for (const auto& [f, loss_db] : sheet.loss) {
    const double x = std::sqrt(f), y = f, l = std::log(amplitude_db_to_ratio(loss_db));
    xx += x * x, xy += x * y, yy += y * y, xl += x * l, yl += y * l;
  }
  const double det = xx * yy - xy * xy;
  double a = (xl * yy - yl * xy) / det, b = (yl * xx - xl * xy) / det;
  if (a < 0) a = 0, b = yl / yy;
  if (b < 0) b = 0, a = xl / xx;
  return {0.0, a, b, sheet.delay_s_per_m, sheet.impedance_ohm};
}

double line_delay_s(const LineModel& model, double length_m, double frequency_hz) {
  if (!(frequency_hz > 0)) throw std::invalid_argument("line_delay_s: the frequency must be > 0");
  const LineConstants c = line_constants(model, Eigen::VectorXd::Constant(1, frequency_hz));
  return c.gamma_per_m[0].imag() * length_m / (2 * pi * frequency_hz);
}

double skin_depth_m(const Conductor& conductor, double frequency_hz) {
  return std::sqrt(resistivity_ohm_m(conductor) / (pi * frequency_hz * kMu0));
}

Eigen::VectorXcd permittivity(const Dielectric& dielectric, const Eigen::VectorXd& frequencies_hz) {
  const WidebandDebye debye(dielectric);
  Eigen::VectorXcd out(frequencies_hz.size());
  for (Eigen::Index k = 0; k < out.size(); ++k) out[k] = debye.at(frequencies_hz[k]);
  return out;
}

Network line_network(const LineModel& model, double length_m, const Eigen::VectorXd& frequencies_hz,
                     double reference_ohm) {
  if (!(std::isfinite(length_m) && length_m >= 0)) {
    throw std::invalid_argument("line_network: the length must be finite and not negative");
  }
  if (!(std::isfinite(reference_ohm) && reference_ohm > 0)) {
    throw std::invalid_argument("line_network: the reference must be finite and above 0");
  }
  const Immittances c = checked_immittances(model, frequencies_hz);
  Network out = empty_network(frequencies_hz, Eigen::VectorXcd::Constant(2, reference_ohm));
  for (Eigen::Index k = 0; k < frequencies_hz.size(); ++k) {
    // The chain matrix cosh x, z l sinh(x)/x; y l sinh(x)/x, cosh x, everything times e^-x.
    const Complex x = std::sqrt(c.z_ohm_per_m[k]) * std::sqrt(c.y_s_per_m[k]) * length_m;
    const Complex decay = std::exp(-x);
    const Complex a = 0.5 * (1.0 + decay * decay);
    const Complex sinhc = damped_sinhc(x) * length_m;
    const Complex b = c.z_ohm_per_m[k] * sinhc / reference_ohm;
    const Complex d = c.y_s_per_m[k] * sinhc * reference_ohm;
    Complex s21 = 2.0 * decay / (2.0 * a + b + d);
    Complex s11 = (b - d) / (2.0 * a + b + d);
    if (frequencies_hz[k] == 0) s21 = s21.real(), s11 = s11.real();
    out.values.col(k) << s11, s21, s21, s11;
  }
  return out;
}

Eigen::VectorXd modelled_frequencies_hz(double symbol_rate_bd, double delay_s) {
  if (!(std::isfinite(symbol_rate_bd) && symbol_rate_bd > 0) ||
      !(std::isfinite(delay_s) && delay_s >= 0)) {
    throw std::invalid_argument(
        "modelled_frequencies_hz: wanted a symbol rate > 0 and a delay >= 0, both finite");
  }
  const double record_s = std::max(1024 / symbol_rate_bd, 16 * delay_s);
  const double top_hz = 4 * symbol_rate_bd;
  const auto last = static_cast<Eigen::Index>(std::ceil(top_hz * record_s));
  return Eigen::VectorXd::LinSpaced(last + 1, 0.0, static_cast<double>(last) / record_s);
}

}  // namespace tapwright
