#include "tapwright/channel/line_model.hpp"

#include <gtest/gtest.h>

#include <boost/math/special_functions/ellint_1.hpp>
#include <cmath>
#include <complex>
#include <numbers>
#include <string>

#include "tapwright/base/fft.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/channel/network_operations.hpp"
#include "tapwright/channel/received_spectrum.hpp"

namespace tapwright {
namespace {

using Complex = std::complex<double>;
using std::numbers::pi;

double matched_loss_db(const LineModel& model, double length_m, double f) {
  const LineConstants c = line_constants(model, Eigen::VectorXd::Constant(1, f));
  return -ratio_to_amplitude_db(std::exp(-c.gamma_per_m[0].real() * length_m));
}

Complex z_c(const LineModel& model, double f) {
  return line_constants(model, Eigen::VectorXd::Constant(1, f)).z_c_ohm[0];
}

Conductor perfect_metal() {
  Conductor metal;
  metal.conductivity_s_per_m = 1e20;
  return metal;
}

TEST(LineModel, HostBoardLineHasTheLossOfTheStandard) {
  // checks.md row 12: IEEE 802.3 clause 92 (from memory, loss recomputed), to 4 decimals, at half
  // of 25.78125 GBd, which the page rounds to 12.89 GHz.
  const double f = 25.78125e9 / 2;
  const AnnexLine line = annex_line(0, 4.114e-4, 2.547e-4, 6.191e-3, 109.8);
  EXPECT_NEAR(matched_loss_db(line, 0.151, f), 6.2435, 5e-5);
  const Network in_100 = line_network(line, 0.151, Eigen::VectorXd::Constant(1, f), 100.0);
  EXPECT_NEAR(-ratio_to_amplitude_db(std::abs(in_100.at(0)(1, 0))), 6.2586, 5e-5);
}

TEST(LineModel, PackageLineHasTheLossOfTheStandard) {
  // checks.md row 12b: Annex 93A (from memory, loss recomputed), to 3 decimals.
  const AnnexLine line = annex_line(0, 1.734e-3, 1.455e-4, 6.141e-3, 78.2);
  EXPECT_NEAR(matched_loss_db(line, 0.030, 12.89e9), 2.111, 5e-4);
}

TEST(LineModel, AirLineDelaysOneNanosecondPerFoot) {
  // checks.md row 10, common practice, within 2 %.
  const PhysicalLine line{Coax{1e-3, 2.3e-3}, {}, {}};
  EXPECT_NEAR(line_delay_s(line, 0.3048, 10e9), 1e-9, 0.02e-9);
  // At 12 Gb/s one bit is about one inch long.
  EXPECT_NEAR(1.0 / 12e9 / line_delay_s(line, 0.0254, 12e9), 1.0, 0.02);
}

TEST(LineModel, DielectricLossFollowsTheHandbook) {
  // checks.md row 13: 2.31 dB per inch per GHz times tan delta sqrt(eps_r), a derived handbook
  // formula, given to 3 figures; the metal is made to conduct almost perfectly.
  PhysicalLine line{Coax{1e-3, 3e-3}, perfect_metal(), {}};
  line.dielectric.eps_r = 3.8;
  line.dielectric.tan_delta = 0.012;
  line.dielectric.frequency_hz = 5e9;
  EXPECT_NEAR(matched_loss_db(line, 0.0254, 5e9) / (5 * 0.012 * std::sqrt(3.8)), 2.31, 0.005);
}

TEST(LineModel, DielectricIsCausal) {
  // Kramers-Kronig for the real part, by quadrature in ln f over twelve decades on both sides:
  // eps'(f) - eps'(infinity) = (2/pi) P-integral of x eps''(x) / (x^2 - f^2) dx.
  Dielectric d;
  d.eps_r = 4.2;
  d.tan_delta = 0.02;
  const double f = 3e9, step = 1e-3;
  double sum = 0.0;
  for (int i = -40000; i < 30000; ++i) {  // the pole lies midway between two points
    const double x = f * std::exp((i + 0.5) * step);
    const double loss = -permittivity(d, Eigen::VectorXd::Constant(1, x))[0].imag();
    sum += x * x * loss / (x * x - f * f) * step;
  }
  const double eps = permittivity(d, Eigen::VectorXd::Constant(1, f))[0].real();
  const double eps_inf = permittivity(d, Eigen::VectorXd::Constant(1, 1e30))[0].real();
  EXPECT_NEAR(eps - eps_inf, 2 / pi * sum, 1e-4);  // method: halving the step changes it by less
  const Complex given = permittivity(d, Eigen::VectorXd::Constant(1, 1e9))[0];
  EXPECT_NEAR(given.real(), 4.2, 1e-12);
  EXPECT_NEAR(-given.imag() / given.real(), 0.02, 1e-12);
}

TEST(LineModel, SkinDepthOfCopperIsThatOfHandbooks) {
  // checks.md row 14: 2.06 to 2.09 um at 1 GHz by the resistivity used, 1.68e-8 to 1.72e-8 ohm m.
  Conductor copper;
  copper.conductivity_s_per_m = 1 / 1.68e-8;
  EXPECT_NEAR(skin_depth_m(copper, 1e9) * 1e6, 2.06, 0.005);
  copper.conductivity_s_per_m = 5.8e7;
  EXPECT_NEAR(skin_depth_m(copper, 1e9) * 1e6, 2.09, 0.005);
}

TEST(LineModel, CopperGrowsWorseWithTemperature) {
  // 0.393 % per kelvin (handbook): the loss of the skin effect goes as the root of the resistance.
  PhysicalLine line{Coax{1e-3, 3e-3}, {}, {}};
  const double cold = matched_loss_db(line, 1.0, 10e9);
  line.conductor.temperature_c = 85.0;
  // Method: internal inductance lowers Z_c by R/(2 w L) = 0.1 %.
  EXPECT_NEAR(matched_loss_db(line, 1.0, 10e9) / cold, std::sqrt(1 + 0.00393 * 65), 2e-3);
}

TEST(LineModel, RoughMetalDoublesTheLossAtMost) {
  // Hammerstad's law tends to 2 where the roughness is much larger than the skin depth.
  PhysicalLine line{Coax{1e-3, 3e-3}, {}, {}};
  const double smooth = matched_loss_db(line, 1.0, 10e9);
  line.conductor.roughness_rms_m = 50e-6;
  EXPECT_NEAR(matched_loss_db(line, 1.0, 10e9) / smooth, 2.0, 5e-3);
  // At a roughness of one skin depth: 1 + (2/pi) atan 1.4 = 1.605.
  line.conductor.roughness_rms_m = skin_depth_m(line.conductor, 10e9);
  EXPECT_NEAR(matched_loss_db(line, 1.0, 10e9) / smooth, 1.605, 3e-3);
}

TEST(LineModel, CoaxLossFollowsTheClosedForm) {
  // Handbook: alpha = R_s / (2 Z0) (1/a + 1/b) / (2 pi), Z0 = eta/(2 pi) ln(b/a), in air.
  const double a = 0.5e-3, b = 1.5e-3, f = 10e9;
  const PhysicalLine line{Coax{2 * a, 2 * b}, {}, {}};
  const double r_s = std::sqrt(pi * f * 4e-7 * pi / 5.8e7);
  const double z0 = 376.730313668 / (2 * pi) * std::log(b / a);
  const double alpha = r_s / (2 * z0) * (1 / a + 1 / b) / (2 * pi);
  // Method: Z_c is 0.1 % above Z0 from internal inductance.
  EXPECT_NEAR(matched_loss_db(line, 1.0, f) / (8.685889638 * alpha), 1.0, 2e-3);
}

TEST(LineModel, WirePairLossKnowsTheProximityEffect) {
  // Handbook: R = 2 R_s / (pi d) / sqrt(1 - (d/s)^2), Z0 = (eta/pi) acosh(s/d).
  const double d = awg_diameter_m(26), s = 1.6 * d, f = 5e9;
  const PhysicalLine line{WirePair{d, s}, {}, {}};
  const double r_s = std::sqrt(pi * f * 4e-7 * pi / 5.8e7);
  const double r = 2 * r_s / (pi * d) / std::sqrt(1 - d * d / (s * s));
  const double z0 = 376.730313668 / pi * std::acosh(s / d);
  EXPECT_NEAR(matched_loss_db(line, 1.0, f) / (8.685889638 * r / (2 * z0)), 1.0, 5e-3);
}

TEST(LineModel, GaugeGivesTheDiameterOfTheTable) {
  // ASTM B258 table: 24 AWG 0.511 mm, 30 AWG 0.255 mm, 36 AWG 0.127 mm.
  EXPECT_NEAR(awg_diameter_m(24) * 1e3, 0.511, 5e-4);
  EXPECT_NEAR(awg_diameter_m(30) * 1e3, 0.255, 5e-4);
  EXPECT_NEAR(awg_diameter_m(36) * 1e3, 0.127, 1e-12);
}

TEST(LineModel, StriplineMeetsTheExactThinStrip) {
  // Cohn 1954: Z0 = 30 pi K(k) / K(k') / sqrt(eps_r), k = sech(pi w / 2b), for no thickness;
  // Wheeler's form is good to 0.5 %.
  for (const double u : {0.2, 0.5, 1.0, 2.0}) {
    const PhysicalLine line{Stripline{u * 1e-3, 1e-3, 1e-9}, perfect_metal(), {}};
    const double k = 1 / std::cosh(pi * u / 2);
    const double want =
        30 * pi * boost::math::ellint_1(k) / boost::math::ellint_1(std::sqrt(1 - k * k));
    EXPECT_NEAR(z_c(line, 1e10).real() / want, 1.0, 5e-3) << u;
  }
}

TEST(LineModel, MicrostripMeetsPublishedPoints) {
  // Thin strip in air, by conformal mapping (Wheeler's wide-strip limit): for w/h -> large,
  // C/eps0 -> w/h + (2/pi) (ln(2 pi e (w/2h + 0.92))) + ..., good to 1 % above w/h = 2 (from
  // memory).
  for (const double u : {2.0, 4.0, 10.0}) {
    const PhysicalLine line{Microstrip{u * 1e-3, 1e-3, 1e-9}, perfect_metal(), {}};
    const double c = u + 2 / pi * (std::log(2 * pi * std::numbers::e * (u / 2 + 0.92)));
    EXPECT_NEAR(z_c(line, 1e10).real() * c / 376.730313668, 1.0, 0.01) << u;
  }
  // Narrow strip: (eta / 2 pi) ln(8 h / w), exact as w/h -> 0.
  const PhysicalLine narrow{Microstrip{1e-5, 1e-3, 1e-12}, perfect_metal(), {}};
  EXPECT_NEAR(z_c(narrow, 1e10).real() / (376.730313668 / (2 * pi) * std::log(800.0)), 1.0, 2e-3);
}

TEST(LineModel, SkinEffectStepIsTheComplementaryErrorFunction) {
  // checks.md row 14b, Wigington and Nahman 1957: H = exp(-b sqrt(s)) has the step response
  // erfc(b / (2 sqrt(t))); 10, 50, 90 % at 0.1848, 1.099, 31.66 b^2.
  const double b2 = 40e-12, b = std::sqrt(b2);
  const AnnexLine line{0, b * std::sqrt(pi), 0, 0, 50.0};  // sqrt(s) = (1 + j) sqrt(pi f)
  const double ui = 100e-12;
  const Eigen::VectorXd f = Eigen::VectorXd::LinSpaced(40001, 0.0, 160e9);
  const Network network = line_network(line, 1.0, f, 50.0);
  const auto result = received_spectrum({f, network.parameter(1, 0)}, {ui, 32}, {}, "line");
  ASSERT_TRUE(result);
  const ReceivedSpectrum& r = *result.value;
  const Eigen::VectorXd p = real_record(r.values, r.num_samples);
  // A step is a pulse and all pulses before it. Its record wraps: the pulses of the records before
  // add what the step still lacks at the end, spread evenly.
  const auto launch = static_cast<Eigen::Index>(std::lround(-r.start_s / (ui / 32)));
  const auto step_at = [&](double t) {
    const double x = t / (ui / 32) + static_cast<double>(launch);
    double value[2] = {0, 0};
    for (int side = 0; side < 2; ++side) {
      for (Eigen::Index i = static_cast<Eigen::Index>(x) + side; i >= launch - 64; i -= 32) {
        value[side] += p[i];
      }
    }
    return std::lerp(value[0], value[1], x - std::floor(x));
  };
  const double record_s = static_cast<double>(r.num_samples) * ui / 32;
  const double missing = 1 - std::erfc(b / (2 * std::sqrt(record_s)));
  for (const auto& [t_over_b2, level] : {std::pair{0.1848, 0.1}, {1.099, 0.5}, {31.66, 0.9}}) {
    EXPECT_NEAR(std::erfc(0.5 / std::sqrt(t_over_b2)), level, 2e-4);
    // Method: the wrapped tail adds at most its mean share for each UI since the launch.
    EXPECT_NEAR(step_at(t_over_b2 * b2), level, 2e-3 + missing * t_over_b2 * b2 / record_s * 2)
        << level;
  }
}

TEST(LineModel, BackplaneLimitHasTheLossOfTheStandard) {
  // checks.md row 12c, IEEE 802.3 Annex 69B (from memory): A_max = 20 log10(e) (b1 sqrt(f) + b2 f +
  // b3 f^2 + b4 f^3) with b = (2e-5, 1.1e-10, 3.2e-20, -1.2e-30), and the insertion loss may reach
  // A_max + 0.8 dB + 2e-10 f. A data sheet that lists this loss at its ends gives it back there.
  const auto limit_db = [](double f) {
    return 8.685889638 *
               (2e-5 * std::sqrt(f) + 1.1e-10 * f + 3.2e-20 * f * f - 1.2e-30 * f * f * f) +
           0.8 + 2e-10 * f;
  };
  EXPECT_NEAR(limit_db(5.15625e9), 25.19, 5e-3);
  const DatasheetLine sheet{{{1e9, limit_db(1e9)}, {5.15625e9, limit_db(5.15625e9)}}, 5e-9, 100};
  EXPECT_TRUE(check_line(sheet, "x").empty());
  EXPECT_NEAR(matched_loss_db(sheet, 1.0, 5.15625e9), 25.19, 5e-3);
}

TEST(LineModel, DataSheetIsMetAtItsTwoPointsAndAtItsDelay) {
  const DatasheetLine sheet{{{1e9, 0.9}, {3.125e9, 1.75}}, 4.6e-9, 100};
  EXPECT_NEAR(matched_loss_db(sheet, 1.0, 1e9), 0.9, 1e-12);
  EXPECT_NEAR(matched_loss_db(sheet, 1.0, 3.125e9), 1.75, 1e-12);
  const AnnexLine line = to_annex_line(sheet);
  // At 1 GHz the logarithm is 0, so only the skin effect adds to the delay: a1 / (2 pi sqrt(f)).
  EXPECT_NEAR(line_delay_s(sheet, 2.0, 1e9),
              2.0 * (4.6e-9 + line.a1_sqrt_s_per_m / (2 * pi * std::sqrt(1e9))), 1e-20);
}

TEST(LineModel, DataSheetBeyondBothLawsIsReported) {
  // Loss that falls with frequency fits no a sqrt(f) + b f with a, b >= 0.
  const auto notes = check_line(DatasheetLine{{{1e9, 2.0}, {4e9, 1.0}}, 4.6e-9, 100}, "link.json");
  ASSERT_EQ(notes.size(), 1u);
  EXPECT_EQ(notes[0].severity, Diagnostic::Severity::kWarning);
  EXPECT_NE(notes[0].message.find("misses the data sheet by"), std::string::npos);
}

TEST(LineModel, ConstantLineMatchesTheTextbook) {
  // cosh and sinh of gamma l with Zc = sqrt((R + jwL)/(G + jwC)), renormalised by hand.
  const RlgcLine line{20.0, 300e-9, 1e-3, 120e-12};
  const double f = 1.7e9, l = 0.4, z0 = 60.0;
  const Complex z(20.0, 2 * pi * f * 300e-9), y(1e-3, 2 * pi * f * 120e-12);
  const Complex g = std::sqrt(z * y), zc = std::sqrt(z / y);
  const Complex a = std::cosh(g * l), b = zc * std::sinh(g * l), c = std::sinh(g * l) / zc;
  const Network s = line_network(line, l, Eigen::VectorXd::Constant(1, f), z0);
  EXPECT_LT(std::abs(s.at(0)(1, 0) - 2.0 / (2.0 * a + b / z0 + c * z0)), 1e-13);
  EXPECT_LT(std::abs(s.at(0)(0, 0) - (b / z0 - c * z0) / (2.0 * a + b / z0 + c * z0)), 1e-13);
}

TEST(LineModel, DirectCurrentSeesTheSeriesResistance) {
  // R = 6 ohm between two 50 ohm ports: s21 = 2 z0 / (2 z0 + R).
  const Network s =
      line_network(RlgcLine{3.0, 300e-9, 0.0, 120e-12}, 2.0, Eigen::VectorXd::Zero(1), 50.0);
  EXPECT_NEAR(s.at(0)(1, 0).real(), 100.0 / 106.0, 1e-9);
  EXPECT_NEAR(s.at(0)(0, 0).real(), 6.0 / 106.0, 1e-9);
  EXPECT_EQ(s.at(0)(1, 0).imag(), 0.0);
}

TEST(LineModel, AVeryLongLineDoesNotOverflow) {
  const Network s = line_network(annex_line(0, 4.114e-4, 2.547e-4, 6.191e-3, 109.8), 1000.0,
                                 Eigen::VectorXd::Constant(1, 50e9), 100.0);
  EXPECT_EQ(s.at(0)(1, 0), 0.0);
  EXPECT_NEAR(s.at(0)(0, 0).real(), 9.8 / 209.8, 1e-12);
}

TEST(LineModel, TwoPiecesInCascadeMakeTheWhole) {
  const LineModel line = annex_line(0, 4.114e-4, 2.547e-4, 6.191e-3, 109.8);
  const Eigen::VectorXd f = Eigen::VectorXd::LinSpaced(50, 0.0, 20e9);
  const auto joined =
      cascade({line_network(line, 0.05, f, 100.0), line_network(line, 0.101, f, 100.0)}, "x");
  ASSERT_TRUE(joined);
  // Rounding.
  EXPECT_LT(
      (joined.value->values - line_network(line, 0.151, f, 100.0).values).cwiseAbs().maxCoeff(),
      1e-13);
}

TEST(LineModel, GridIsFineEnoughForTheDelay) {
  const Eigen::VectorXd f = modelled_frequencies_hz(10e9, 100e-9);
  EXPECT_EQ(f[0], 0.0);
  EXPECT_LT(f[1], 1 / (2 * 100e-9));
  EXPECT_GE(f[f.size() - 1], 40e9);
  EXPECT_LE(modelled_frequencies_hz(10e9, 0.0)[1], 10e9 / 1024 * (1 + 1e-12));
}

TEST(LineModel, NamesEachNumberThatMakesNoSense) {
  const auto message = [](const LineModel& model) {
    const auto notes = check_line(model, "link.json");
    return notes.empty() ? std::string() : to_string(notes[0]);
  };
  EXPECT_EQ(message(AnnexLine{0, 0, 0, 1e-9, 0}),
            "link.json: error: line: impedance = 0; wanted a finite number above 0");
  EXPECT_EQ(message(AnnexLine{0, -1e-6, 0, 1e-9, 100}),
            "link.json: error: line: a1 = -1e-06; wanted a finite number, 0 or more");
  EXPECT_EQ(message(DatasheetLine{{{1e9, 0.9}}, 4.6e-9, 100}),
            "link.json: error: line: found the loss at 1 frequencies; wanted two or more");
  EXPECT_EQ(message(DatasheetLine{{{2e9, 0.9}, {1e9, 1.0}}, 4.6e-9, 100}),
            "link.json: error: line: frequency of a loss = 1e+09; wanted rising frequencies, after "
            "2e+09");
  EXPECT_EQ(message(PhysicalLine{WirePair{1e-3, 0.9e-3}, {}, {}}),
            "link.json: error: line: wire diameter = 0.001; wanted less than wire spacing = 9e-04");
  EXPECT_THROW((void)line_constants(AnnexLine{}, Eigen::VectorXd::Ones(1)), std::invalid_argument);
}

}  // namespace
}  // namespace tapwright
