#include "tapwright/channel/lumped.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <numbers>

#include "tapwright/base/units.hpp"
#include "tapwright/channel/network_operations.hpp"

namespace tapwright {
namespace {

using Complex = std::complex<double>;
using Eigen::Index;

constexpr double kEps = std::numeric_limits<double>::epsilon();
const Eigen::VectorXd kGrid = Eigen::VectorXd::LinSpaced(101, 0.0, 2e10);

SeriesElement resistor(double ohm) {
  SeriesElement part;
  part.resistance_ohm = ohm;
  return part;
}

TEST(Ladder, GivesTheVoltageDividerOfResistors) {
  ShuntElement shunt;
  shunt.resistance_ohm = 25.0;
  const Network network = ladder_network({resistor(30.0), shunt, resistor(10.0)}, kGrid, 50.0);
  // By hand: 60 ohm behind the shunt, 25 || 60 = 17.647 ohm, with 80 ohm before it; the load gets
  // 50/60 of the node. H = 2 x 17.647/97.647 x 5/6.
  const double node = 25.0 * 60.0 / 85.0;
  const double wanted = 2.0 * node / (node + 80.0) * 50.0 / 60.0;
  for (Index k = 0; k < kGrid.size(); ++k) {
    EXPECT_NEAR(network.at(k)(1, 0).real(), wanted, 16 * kEps);
    EXPECT_NEAR(network.at(k)(0, 1).real(), wanted, 16 * kEps);
  }
}

TEST(Ladder, EmptyIsAThrough) {
  const Network network = ladder_network({}, kGrid, 75.0);
  EXPECT_EQ(network.parameter(1, 0), Eigen::VectorXcd::Ones(kGrid.size()));
  EXPECT_EQ(network.parameter(0, 0), Eigen::VectorXcd::Zero(kGrid.size()));
  EXPECT_EQ(network.reference_ohm, Eigen::Vector2cd(75.0, 75.0));
}

// One-pole circuits: the corner lies where the reactance equals the resistance it sees.
TEST(Ladder, HasTheCornersOfOnePoleCircuits) {
  const double corner_hz = 3e9;
  const double w = 2.0 * std::numbers::pi * corner_hz;
  ShuntElement capacitor;
  capacitor.capacitance_f = 1.0 / (w * 25.0);  // sees 50 || 50
  SeriesElement inductor;
  inductor.inductance_h = 100.0 / w;  // sees 50 + 50
  SeriesElement blocking;
  blocking.capacitance_f = 1.0 / (w * 100.0);
  ShuntElement coil;
  coil.inductance_h = 25.0 / w;
  const Eigen::VectorXd f = Eigen::Vector3d(0.0, corner_hz, 10.0 * corner_hz);
  for (const Element& low_pass : {Element(capacitor), Element(inductor)}) {
    const Network network = ladder_network({low_pass}, f, 50.0);
    for (Index k = 0; k < 3; ++k) {
      EXPECT_LE(std::abs(network.at(k)(1, 0) - 1.0 / Complex(1.0, f[k] / corner_hz)), 16 * kEps);
    }
  }
  for (const Element& high_pass : {Element(blocking), Element(coil)}) {
    const Network network = ladder_network({high_pass}, f, 50.0);
    EXPECT_EQ(network.at(0)(1, 0), Complex(0.0));
    for (Index k = 1; k < 3; ++k) {
      EXPECT_LE(std::abs(network.at(k)(1, 0) - 1.0 / Complex(1.0, -corner_hz / f[k])), 16 * kEps);
    }
  }
}

TEST(Ladder, SeriesResonanceOpensTheLine) {
  SeriesElement part;
  part.inductance_h = 1e-9;
  part.capacitance_f = 1e-12;
  const double resonance_hz = 1.0 / (2.0 * std::numbers::pi * std::sqrt(1e-9 * 1e-12));
  const Network network = ladder_network({part}, Eigen::VectorXd::Constant(1, resonance_hz), 50.0);
  // Rounding: two reactances of 31.6 ohm that cancel against 100 ohm.
  EXPECT_LE(std::abs(network.at(0)(1, 0) - 1.0), 16 * kEps);
}

TEST(Ladder, LineSectionDelaysAndMatchesOnlyItsOwnReference) {
  const LineSection section{60.0, 20e-12, 0.5};
  const Network matched = ladder_network({section}, kGrid, 60.0);
  for (Index k = 1; k < kGrid.size(); ++k) {
    const double f = kGrid[k];
    EXPECT_LE(std::abs(matched.at(k)(0, 0)), 16 * kEps);
    // By definition: 0.5 dB sqrt(f / 1 GHz); rounding of a logarithm of order 1.
    EXPECT_NEAR(-ratio_to_amplitude_db(std::abs(matched.at(k)(1, 0))), 0.5 * std::sqrt(f / 1e9),
                100 * kEps);
  }
  // A quarter wave without loss turns 50 into 60^2/50 = 72 ohm: s11 = 22/122.
  const Network quarter =
      ladder_network({LineSection{60.0, 20e-12, 0.0}}, Eigen::VectorXd::Constant(1, 12.5e9), 50.0);
  EXPECT_NEAR(std::abs(quarter.at(0)(0, 0)), 22.0 / 122.0, 32 * kEps);
}

TEST(Ladder, PackageStartsAtTheDieAndMirrorsForTheReceiver) {
  // The annex's 30 mm package line with 0.25 pF at the die and 0.18 pF at the ball (from memory).
  const LineModel line = annex_line(0.0, 1.734e-3, 1.455e-4, 6.141e-3, 78.2);
  const Ladder ladder = package_ladder(0.25e-12, line, 0.03, 0.18e-12);
  const Network forward = ladder_network(ladder, kGrid, 50.0);
  const Network backward = ladder_network(mirrored(ladder), kGrid, 50.0);
  EXPECT_LE((turned_round(forward).values - backward.values).cwiseAbs().maxCoeff(), 64 * kEps);
  // At 1 GHz the die's capacitance weighs on port 1 only: by hand from the chain of the three
  // parts, as impedances seen from port 1 with 50 ohm behind port 2.
  const double f = 1e9;
  const Eigen::VectorXd one = Eigen::VectorXd::Constant(1, f);
  const Complex jw(0.0, 2.0 * std::numbers::pi * f);
  const Complex load = 1.0 / (1.0 / 50.0 + jw * 0.18e-12);
  const LineConstants constants = line_constants(line, one);
  const Complex t = std::tanh(constants.gamma_per_m[0] * 0.03);
  const Complex z_c = constants.z_c_ohm[0];
  const Complex seen = z_c * (load + z_c * t) / (z_c + load * t);
  const Complex z = 1.0 / (1.0 / seen + jw * 0.25e-12);
  EXPECT_LE(std::abs(ladder_network(ladder, one, 50.0).at(0)(0, 0) - (z - 50.0) / (z + 50.0)),
            64 * kEps);
}

TEST(Ladder, IsPassiveAndLosslessWithoutLoss) {
  ShuntElement capacitor;
  capacitor.capacitance_f = 0.2e-12;
  SeriesElement inductor;
  inductor.inductance_h = 0.3e-9;
  const Network network =
      ladder_network({capacitor, LineSection{42.0, 30e-12, 0.0}, inductor}, kGrid, 50.0);
  for (Index k = 0; k < kGrid.size(); ++k) {
    const Eigen::Matrix2cd s = network.at(k);
    EXPECT_LE((s.adjoint() * s - Eigen::Matrix2cd::Identity()).cwiseAbs().maxCoeff(), 64 * kEps);
  }
}

TEST(Ladder, NamesTheElementAtFault) {
  const auto text = [](const Element& element) {
    const auto notes = check_ladder({resistor(1.0), element}, "parts");
    EXPECT_THROW((void)ladder_network({element}, kGrid, 50.0), std::invalid_argument);
    return notes.size() == 1 ? to_string(notes[0]) : std::string("?");
  };
  EXPECT_EQ(text(resistor(-1.0)), "parts: error: element 2: found resistance -1; wanted >= 0");
  SeriesElement blocking;
  blocking.capacitance_f = 0.0;
  EXPECT_EQ(text(blocking), "parts: error: element 2: found capacitance 0; wanted > 0");
  EXPECT_EQ(text(LineSection{0.0, 1e-12, 0.0}),
            "parts: error: element 2: found impedance 0; wanted > 0");
  EXPECT_EQ(text(LineSection{50.0, std::nan(""), 0.0}),
            "parts: error: element 2: found delay nan; wanted >= 0");
  EXPECT_TRUE(check_ladder({resistor(0.0)}, "parts").empty());
  EXPECT_THROW((void)ladder_network({}, Eigen::VectorXd(), 50.0), std::invalid_argument);
  EXPECT_THROW((void)ladder_network({}, Eigen::Vector2d(1.0, 1.0), 50.0), std::invalid_argument);
  EXPECT_THROW((void)ladder_network({}, kGrid, 0.0), std::invalid_argument);
}

/// A two-port with reflections at both ends, different ones.
Network half(const Eigen::VectorXd& f, double delay_s) {
  ShuntElement pad;
  pad.capacitance_f = 0.05e-12;
  SeriesElement pin;
  pin.inductance_h = 0.2e-9;
  return ladder_network({pad, LineSection{46.0, delay_s, 0.3}, pin}, f, 50.0);
}

TEST(WithoutFixture, GivesBackWhatWasPutBetween) {
  const Network left = half(kGrid, 100e-12);
  const Network right = turned_round(half(kGrid, 140e-12));
  const Network device = ladder_network({LineSection{60.0, 300e-12, 1.0}}, kGrid, 50.0);
  const auto both = cascade({left, device, right}, "m");
  const auto result = without_fixture(*both.value, left, right, "m");
  ASSERT_TRUE(result);
  EXPECT_TRUE(result.notes.empty());
  // Rounding: the halves pass at least half of a wave at 20 GHz, twice each.
  EXPECT_LE((result.value->values - device.values).cwiseAbs().maxCoeff(), 1e4 * kEps);
  const auto one_side = without_fixture(*cascade({left, device}, "m").value, left, {}, "m");
  ASSERT_TRUE(one_side);
  EXPECT_LE((one_side.value->values - device.values).cwiseAbs().maxCoeff(), 1e4 * kEps);
}

TEST(WithoutFixture, WorksOnFourPortsAndOtherReferences) {
  // Two separate lines as a four-port: 1 -> 3, 2 -> 4.
  const auto twin = [](const Network& a, const Network& b) {
    Network four = empty_network(a.frequencies_hz, Eigen::VectorXcd::Constant(4, 50.0));
    for (Index k = 0; k < four.num_points(); ++k) {
      for (Index i = 0; i < 2; ++i) {
        for (Index j = 0; j < 2; ++j) {
          four.at(k)(2 * i, 2 * j) = a.at(k)(i, j);
          four.at(k)(2 * i + 1, 2 * j + 1) = b.at(k)(i, j);
        }
      }
    }
    return four;
  };
  const Network left = twin(half(kGrid, 100e-12), half(kGrid, 110e-12));
  const Network device = twin(ladder_network({LineSection{60.0, 300e-12, 1.0}}, kGrid, 50.0),
                              ladder_network({LineSection{55.0, 310e-12, 1.0}}, kGrid, 50.0));
  const auto measured = cascade({left, device}, "m");
  const Eigen::VectorXcd other = Eigen::Vector4cd(45.0, 50.0, 55.0, 42.5);
  const auto result = without_fixture(renormalised(*measured.value, other), left, {}, "m");
  ASSERT_TRUE(result);
  EXPECT_LE((result.value->values - renormalised(device, other).values).cwiseAbs().maxCoeff(),
            1e4 * kEps);
}

TEST(WithoutFixture, BringsTheHalfToTheMeasuredGridAndSaysSo) {
  const Network left = half(Eigen::VectorXd::LinSpaced(151, 0.0, 1.5e10), 100e-12);
  const Network device = ladder_network({LineSection{60.0, 300e-12, 1.0}}, kGrid, 50.0);
  const auto measured = cascade({half(kGrid, 100e-12), device}, "m");
  const auto result = without_fixture(*measured.value, left, {}, "m");
  ASSERT_TRUE(result);
  ASSERT_EQ(result.notes.size(), 1U);
  EXPECT_EQ(to_string(result.notes[0]),
            "m: warning: the frequency grids differ; the fixture was interpolated onto 76 points "
            "from 0 to 15 GHz");
  EXPECT_EQ(result.value->frequencies_hz, kGrid.head(76));
}

TEST(WithoutFixture, RefusesAHalfThatPassesNothing) {
  SeriesElement blocking;
  blocking.capacitance_f = 1e-12;
  const Network left = ladder_network({blocking}, kGrid, 50.0);
  const auto result = without_fixture(left, left, {}, "m");
  ASSERT_FALSE(result);
  EXPECT_EQ(to_string(result.notes[0]),
            "m: error: found a fixture half that passes nothing at 0 GHz; wanted over -100 dB");
  const auto ports =
      without_fixture(left, empty_network(kGrid, Eigen::VectorXcd::Ones(4)), {}, "m");
  ASSERT_FALSE(ports);
  EXPECT_EQ(to_string(ports.notes[0]),
            "m: error: found a fixture half with 4 ports; wanted 2 as the measured network has");
}

}  // namespace
}  // namespace tapwright
