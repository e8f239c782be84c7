#include "tapwright/channel/quality.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <numbers>

#include "support/input_files.hpp"
#include "support/measured_data.hpp"
#include "tapwright/base/fft.hpp"
#include "tapwright/channel/lumped.hpp"
#include "tapwright/channel/network_operations.hpp"
#include "tapwright/channel/received_spectrum.hpp"
#include "tapwright/channel/touchstone.hpp"

namespace tapwright {
namespace {

using Complex = std::complex<double>;
using Eigen::Index;

constexpr double kEps = std::numeric_limits<double>::epsilon();
constexpr double kPi = std::numbers::pi;

/// A matched two-port with the given transmissions, the same at every point but for a delay.
Network flat(Complex s21, Complex s12, double delay_s = 0.5e-9) {
  Network network =
      empty_network(Eigen::VectorXd::LinSpaced(101, 0.0, 1e10), Eigen::Vector2cd(50.0, 50.0));
  for (Index k = 0; k < 101; ++k) {
    const Complex turn = std::polar(1.0, -2.0 * kPi * network.frequencies_hz[k] * delay_s);
    network.at(k) << 0.0, s12 * turn, s21 * turn, 0.0;
  }
  return network;
}

TEST(DataQuality, IsWholeForALosslessLine) {
  const DataQuality quality = measure_data(flat(1.0, 1.0));
  EXPECT_EQ(quality.passivity_percent, 100.0);
  EXPECT_EQ(quality.reciprocity_percent, 100.0);
  EXPECT_EQ(quality.causality_percent, 100.0);
  EXPECT_EQ(quality.num_points, 101);
  EXPECT_EQ(quality.lowest_hz, 0.0);
  EXPECT_EQ(quality.highest_hz, 1e10);
  EXPECT_NEAR(quality.largest_step_hz, 1e8, 1e10 * kEps);
  EXPECT_THROW((void)measure_data(empty_network(Eigen::Vector2d(1, 2), Eigen::Vector2cd(1, 1))),
               std::invalid_argument);
}

// By hand from the definitions: gain 1.05 loses (1.05 - 1.00001)/0.1 of each point; a mean
// difference of 0.05 loses (0.05 - 1e-6)/0.1.
TEST(DataQuality, LosesPercentForGainAndForOneWayData) {
  const DataQuality quality = measure_data(flat(1.05, 1.0));
  EXPECT_NEAR(quality.passivity_percent, 100.0 - 49.99, 1e-9);
  EXPECT_NEAR(quality.reciprocity_percent, 100.0 - 49.999, 1e-9);
  EXPECT_NEAR(quality.largest_gain, 1.05, 16 * kEps);
}

TEST(DataQuality, HasNoCausalityWhereTheResponseComesBeforeItsCause) {
  EXPECT_EQ(measure_data(flat(1.0, 1.0, -0.5e-9)).causality_percent, 0.0);
}

const Eigen::VectorXd kWide = Eigen::VectorXd::LinSpaced(2001, 0.0, 4e10);

TEST(ImpedanceProfile, ReadsTheImpedancesOfSections) {
  // Whole multiples of the section length 1/(4 x 40 GHz) = 6.25 ps.
  const std::vector<double> ohm = {40.0, 60.0, 50.0, 75.0};
  Ladder ladder;
  for (const double z : ohm) ladder.push_back(LineSection{z, 125e-12, 0.0});
  const Network path = ladder_network(ladder, kWide, 50.0);
  const ImpedanceProfile profile = impedance_profile(path, 0, 500e-12);
  for (std::size_t i = 0; i < ohm.size(); ++i) {
    // The middle of each section. Method: the taper acts once on a reflection between three
    // boundaries but thrice on their peeled product, an error of order k^3 = 0.01 of the impedance.
    const double middle_s = (static_cast<double>(i) + 0.5) * 125e-12;
    Index at = 0;
    (profile.delay_s.array() - middle_s).abs().minCoeff(&at);
    EXPECT_NEAR(profile.impedance_ohm[at], ohm[i], 0.01 * ohm[i]) << i;
  }
  // From the other end they come in the other order.
  const ImpedanceProfile back = impedance_profile(path, 1, 500e-12);
  Index at = 0;
  (back.delay_s.array() - 62.5e-12).abs().minCoeff(&at);
  EXPECT_NEAR(back.impedance_ohm[at], 75.0, 0.75);
}

TEST(ImpedanceProfile, IsNearTheReferenceOnAMatchedLineAndNeedsATwoPort) {
  const Network path = ladder_network({LineSection{50.0, 300e-12, 3.0}}, kWide, 50.0);
  const ImpedanceProfile profile = impedance_profile(path, 0, 300e-12);
  // Rounding: an FFT of 4000 points of nothing.
  EXPECT_LE((profile.impedance_ohm.array() - 50.0).abs().maxCoeff(), 1e4 * kEps * 50.0);
  EXPECT_THROW((void)impedance_profile(path, 2, 1e-9), std::invalid_argument);
  EXPECT_THROW((void)impedance_profile(path, 0, 0.0), std::invalid_argument);
}

/// Worst-case eye of the pulse through a response, straight from the definition.
double eye_v(const Eigen::VectorXd& frequencies_hz, const Eigen::VectorXcd& through,
             double symbol_rate_bd) {
  TimeGrid grid;
  grid.ui_s = 1.0 / symbol_rate_bd;
  FrequencyResponse response;
  response.frequencies_hz = frequencies_hz;
  response.values = through;
  const auto spectrum = received_spectrum(response, grid, {}, "test");
  EXPECT_TRUE(spectrum);
  const Eigen::VectorXd p = real_record(spectrum.value->values, spectrum.value->num_samples);
  double best = -1.0;
  for (Index phase = 0; phase < grid.samples_per_ui; ++phase) {
    double sum = 0.0;
    double main = 0.0;
    for (Index i = phase; i < p.size(); i += grid.samples_per_ui) {
      sum += std::abs(p[i]);
      main = std::max(main, p[i]);
    }
    best = std::max(best, 2.0 * (2.0 * main - sum));
  }
  return best;
}

/// Eye that comes back when the part at `index` of a ladder is left out: the cost by its
/// definition.
double cost_v(const Ladder& ladder, std::size_t index, double symbol_rate_bd) {
  Ladder without = ladder;
  without.erase(without.begin() + static_cast<std::ptrdiff_t>(index));
  const auto eye = [&](const Ladder& parts) {
    return eye_v(kWide, ladder_network(parts, kWide, 50.0).parameter(1, 0), symbol_rate_bd);
  };
  return eye(without) - eye(ladder);
}

TEST(PathQuality, SaysWhereTheWorstReflectionSitsAndWhatItCosts) {
  ShuntElement bad;
  bad.capacitance_f = 0.4e-12;
  ShuntElement fair;
  fair.capacitance_f = 0.1e-12;
  const Ladder ladder = {fair, LineSection{50.0, 600e-12, 0.5}, bad,
                         LineSection{50.0, 400e-12, 0.4}, fair};
  const Network path = ladder_network(ladder, kWide, 50.0);
  const auto quality = measure_path(path, {{1}, {2}}, 2e10, "path");
  ASSERT_TRUE(quality);
  ASSERT_TRUE(quality.value->worst_reflection);
  const WorstReflection& worst = *quality.value->worst_reflection;
  // Method: the place to the taper's resolution; half of the delay that the loss adds is not the
  // line's.
  EXPECT_NEAR(worst.delay_s, 600e-12, 1.0 / 4e10);
  EXPECT_NEAR(worst.share, 0.6, 0.05);
  // By hand: a capacitor alone dips by w C 50/2 at the band's upper half; well under 40 ohm.
  EXPECT_LT(worst.impedance_ohm, 40.0);
  EXPECT_NEAR(worst.impedance_before_ohm, 50.0, 1.0);
  // Method: the estimate sees one loss for the whole path and half of the band undimmed; a quarter
  // of the cost is what such a model is good for.
  const double wanted_v = cost_v(ladder, 2, 2e10);
  EXPECT_GT(wanted_v, 0.1);
  EXPECT_NEAR(worst.eye_cost_v, wanted_v, 0.25 * wanted_v);
}

TEST(PathQuality, FindsNothingThatReflectsOnAMatchedLine) {
  const Network path = ladder_network({LineSection{50.0, 600e-12, 0.5}}, kWide, 50.0);
  const auto quality = measure_path(path, {{1}, {2}}, 1e10, "path");
  ASSERT_TRUE(quality);
  EXPECT_FALSE(quality.value->worst_reflection);
}

/// Two uncoupled matched lines, 1 -> 3 and 2 -> 4, the second later by `skew_s`.
Network pair_with_skew(double skew_s) {
  const Eigen::VectorXd f = Eigen::VectorXd::LinSpaced(1001, 0.0, 1e10);
  Network network = empty_network(f, Eigen::VectorXcd::Constant(4, 50.0));
  for (Index k = 0; k < f.size(); ++k) {
    const Complex plus = std::polar(0.9, -2.0 * kPi * f[k] * 1e-9);
    const Complex minus = std::polar(0.9, -2.0 * kPi * f[k] * (1e-9 + skew_s));
    network.at(k)(2, 0) = network.at(k)(0, 2) = plus;
    network.at(k)(3, 1) = network.at(k)(1, 3) = minus;
  }
  return network;
}

TEST(PathQuality, MeasuresSkewAndModeConversionOfAPair) {
  for (const double skew_s : {3e-12, -7e-12, 60e-12}) {
    const auto quality = measure_path(pair_with_skew(skew_s), {{1, 2}, {3, 4}}, 1e10, "pair");
    ASSERT_TRUE(quality);
    EXPECT_NEAR(*quality.value->skew_s, skew_s, 1e3 * kEps * 1e-9);
    // By hand: S_cd21 = (plus - minus)/2, of magnitude 0.9 sin(pi f skew).
    EXPECT_NEAR(*quality.value->mode_conversion_db,
                20.0 * std::log10(0.9 * std::abs(std::sin(kPi * 5e9 * skew_s))), 1e-9);
  }
}

TEST(PathQuality, MeasuresDelayLossAndReturnLoss) {
  Network network = flat(0.5, 0.5, 2e-9);
  network.at(30)(0, 0) = 0.1;
  network.at(40)(1, 1) = Complex(0.0, 0.2);
  network.at(90)(1, 1) = 0.9;  // above 3/4 of the symbol rate
  const auto quality = measure_path(network, {{1}, {2}}, 8e9, "path");
  ASSERT_TRUE(quality);
  EXPECT_NEAR(quality.value->delay_s, 2e-9, 1e-20);
  EXPECT_NEAR(quality.value->turns_per_step, 0.2, 1e-10);
  EXPECT_NEAR(quality.value->top_over_symbol_rate, 1.25, 1e-12);
  EXPECT_NEAR(quality.value->insertion_loss_db, 6.0206, 1e-4);
  EXPECT_NEAR(quality.value->insertion_loss_hz, 4e9, 1.0);
  EXPECT_NEAR(quality.value->return_loss_in_db, 20.0, 1e-9);
  EXPECT_NEAR(quality.value->return_loss_in_hz, 3e9, 1.0);
  EXPECT_NEAR(quality.value->return_loss_out_db, 13.9794, 1e-4);
  EXPECT_NEAR(quality.value->return_loss_out_hz, 4e9, 1.0);
  EXPECT_LT(quality.value->ripple_db, 1e-9);
  EXPECT_FALSE(quality.value->skew_s);
}

TEST(PathQuality, RipplesWhereALineHasTwoReflections) {
  // |1 - G^2 e^-2jwt| swings by +-G^2: 20 log10 of 1 +- 1/36 is 0.24 dB each way.
  const auto quality = measure_path(ladder_network({LineSection{70.0, 800e-12, 0.0}}, kWide, 50.0),
                                    {{1}, {2}}, 1e10, "path");
  ASSERT_TRUE(quality);
  EXPECT_NEAR(quality.value->ripple_db, 0.24, 0.03);
}

TEST(PathQuality, RefusesWhatItCanNotMeasure) {
  const auto text = [](const Result<PathQuality>& result) {
    EXPECT_FALSE(result);
    return result.notes.size() == 1 ? to_string(result.notes[0]) : std::string("?");
  };
  EXPECT_EQ(text(measure_path(flat(1, 1), {{1}, {2}}, 0.0, "p")),
            "p: error: found symbol rate 0 Bd; wanted > 0");
  EXPECT_EQ(text(measure_path(flat(1, 1), {{1}, {3}}, 1e9, "p")),
            "p: error: found port 3; the file has ports 1 to 2");
  EXPECT_EQ(text(measure_path(empty_network(Eigen::Vector2d(1, 2), Eigen::Vector2cd(1, 1)),
                              {{1}, {2}}, 1e9, "p")),
            "p: error: found 2 points; wanted 8 or more");
}

TEST(NearestPassive, CutsTheGainAndTouchesNothingElse) {
  Network network = flat(0.9, 0.9);
  network.at(10) << 0.0, 1.25, 0.5, 0.0;  // singular values 1.25 and 0.5
  const PassiveRepair repair = nearest_passive(network);
  EXPECT_EQ(repair.num_changed, 1);
  EXPECT_NEAR(repair.largest_change, 0.25, 4 * kEps);
  Network wanted = network;
  wanted.at(10) << 0.0, 1.0, 0.5, 0.0;
  EXPECT_LE((repair.network.values - wanted.values).cwiseAbs().maxCoeff(), 8 * kEps);
  // Already passive data stay as they are, to the bit.
  EXPECT_EQ(nearest_passive(flat(0.9, 0.9)).network.values, flat(0.9, 0.9).values);
}

TEST(QualityRows, GradeAndExplain) {
  const Network pair = pair_with_skew(3e-12);
  const auto rows = quality_rows(measure_data(pair),
                                 *measure_path(pair, {{1, 2}, {3, 4}}, 1e10, "pair").value, 0.5);
  const auto row = [&](const std::string& name) {
    for (const QualityRow& one : rows) {
      if (one.name == name) return one.value + " | " + one.remark;
    }
    return std::string("absent");
  };
  EXPECT_EQ(row("passivity"), "100.00 % | ");
  EXPECT_EQ(row("lowest frequency"), "DC | ");
  EXPECT_EQ(row("frequency step"), "10 MHz, 0.010 turns | ");
  EXPECT_EQ(row("intra-pair skew"), "3.00 ps | 0.030 UI; > 0: the - line is later");
  EXPECT_EQ(row("delay"), "1001.5 ps | ");  // the mean of 1000 and 1003 ps
  EXPECT_EQ(row("worst reflection"), "absent");
}

TEST(PathQuality, FindsTheSimulatedPairSound) {
  const auto path = test::measured_file("coupled_pair_fixtured.s4p");
  if (!path) GTEST_SKIP() << test::kNoMeasuredFiles;
  const Network network = *parse_touchstone(test::bytes_of(*path), *path).value;
  const DataQuality data = measure_data(network);
  // A simulation of a passive, reciprocal board.
  EXPECT_GT(data.passivity_percent, 99.9);
  EXPECT_GT(data.reciprocity_percent, 99.9);
  const auto quality = measure_path(network, {{1, 2}, {3, 4}}, 10.3125e9, "pair");
  ASSERT_TRUE(quality);
  // The pair is symmetric: no skew, no conversion.
  EXPECT_LT(std::abs(*quality.value->skew_s), 1e-15);
  EXPECT_LT(*quality.value->mode_conversion_db, -150.0);
}

}  // namespace
}  // namespace tapwright
