#include <gtest/gtest.h>

#include <cmath>
#include <numbers>

#include "support/input_files.hpp"
#include "support/measured_data.hpp"
#include "support/python.hpp"
#include "tapwright/channel/network_operations.hpp"
#include "tapwright/channel/ports.hpp"
#include "tapwright/channel/touchstone.hpp"

namespace tapwright {
namespace {

using Complex = std::complex<double>;
using Eigen::Index;
using nlohmann::json;

constexpr double kEps = std::numeric_limits<double>::epsilon();

Eigen::VectorXcd complex_list(const json& list) {
  Eigen::VectorXcd values(static_cast<Index>(list.size()));
  for (Index i = 0; i < values.size(); ++i) {
    const json& pair = list[static_cast<std::size_t>(i)];
    values[i] = {pair[0].get<double>(), pair[1].get<double>()};
  }
  return values;
}

/// The matrix of a column-major list at two frequencies, the same at both.
Network network_of(const json& s, const Eigen::VectorXcd& reference_ohm,
                   const Eigen::VectorXd& frequencies_hz = Eigen::Vector2d(1e9, 2e9)) {
  Network network = empty_network(frequencies_hz, reference_ohm);
  network.values.colwise() = complex_list(s);
  return network;
}

const json& reference() {
  static const json values = [] {
    const auto result = test::run_python("tests/outside/network_reference.py");
    EXPECT_TRUE(result);
    return result.value_or(json{});
  }();
  return values;
}

// Rounding: a few dozen operations and one or two solutions of systems of up to 4 unknowns, whose
// condition stays under 1e3 for these draws.
constexpr double kRounding = 1e4 * kEps;

class AgainstCircuitTheory : public testing::Test {
 protected:
  void SetUp() override {
    if (!test::has_scipy()) GTEST_SKIP() << "numpy is not here";
  }
};

TEST_F(AgainstCircuitTheory, RenormalisesToAnyReferences) {
  for (const json& item : reference()["renormalised"]) {
    const Network network = network_of(item["s"], complex_list(item["old"]));
    const Network result = renormalised(network, complex_list(item["new"]));
    EXPECT_LE((result.values.col(1) - complex_list(item["wanted"])).cwiseAbs().maxCoeff(),
              kRounding);
    const Network back = renormalised(result, network.reference_ohm);
    EXPECT_LE((back.values - network.values).cwiseAbs().maxCoeff(), kRounding);
  }
}

TEST_F(AgainstCircuitTheory, CascadesTwoAndFourPorts) {
  for (const json& item : reference()["cascade"]) {
    const auto result = cascade({network_of(item["a"], complex_list(item["ref_a"])),
                                 network_of(item["b"], complex_list(item["ref_b"]))},
                                "cascade");
    ASSERT_TRUE(result);
    EXPECT_TRUE(result.notes.empty());
    EXPECT_LE((result.value->values.col(0) - complex_list(item["wanted"])).cwiseAbs().maxCoeff(),
              kRounding);
    EXPECT_EQ(result.value->reference_ohm, complex_list(item["ref"]));
  }
}

TEST_F(AgainstCircuitTheory, GivesAllFourModeBlocks) {
  for (const json& item : reference()["mixed_mode"]) {
    const Network network =
        network_of(item["s"], Eigen::VectorXcd::Constant(4, item["z0"].get<double>()));
    const PortMap map{{1, 2}, {3, 4}};
    const auto modes = mixed_mode(network, map, "map");
    ASSERT_TRUE(modes);
    const Eigen::VectorXcd wanted = complex_list(item["wanted"]);
    EXPECT_LE((modes.value->values.col(0) - wanted).cwiseAbs().maxCoeff(), kRounding);
    EXPECT_EQ(modes.value->reference_ohm, complex_list(item["ref"]));
    const auto path = through_path(network, map, "map");
    ASSERT_TRUE(path);
    EXPECT_EQ(path.value->reference_ohm, modes.value->reference_ohm.head(2));
    for (int to = 0; to < 2; ++to) {
      for (int from = 0; from < 2; ++from) {
        EXPECT_LE(std::abs(path.value->at(0)(to, from) - wanted[4 * from + to]), kRounding);
      }
    }
  }
}

TEST_F(AgainstCircuitTheory, TerminatesInRealAndComplexImpedancesWithCapacitance) {
  for (const json& item : reference()["terminated"]) {
    const double f = item["f"].get<double>();
    const Network network =
        network_of(item["s"], complex_list(item["ref"]), Eigen::Vector2d(f, 2.0 * f));
    Termination source;
    source.impedance_ohm = complex_list(item["zs"])[0];
    source.capacitance_f = item["cs"].get<double>();
    Termination load;
    load.impedance_ohm = complex_list(item["zl"])[0];
    load.capacitance_f = item["cl"].get<double>();
    if (source.impedance_ohm->imag() == 0.0) {
      source.resistance_ohm = source.impedance_ohm->real();
      source.impedance_ohm.reset();
    }
    const FrequencyResponse response = terminated_response(network, source, load);
    EXPECT_EQ(response.frequencies_hz, network.frequencies_hz);
    EXPECT_LE(std::abs(response.values[0] - complex_list(item["wanted"])[0]), kRounding);
  }
}

TEST_F(AgainstCircuitTheory, EndsAPortInAnImpedance) {
  for (const json& item : reference()["ended"]) {
    Termination termination;
    termination.impedance_ohm = complex_list(item["zt"])[0];
    const Network result =
        with_port_ended(network_of(item["s"], complex_list(item["ref"])), 3, termination);
    EXPECT_LE((result.values.col(0) - complex_list(item["wanted"])).cwiseAbs().maxCoeff(),
              kRounding);
  }
}

TEST(Network, IsTerminatedInItsReferenceByItsTransmissionAlone) {
  Network network = empty_network(Eigen::Vector2d(0.0, 1e9), Eigen::Vector2cd(100.0, 100.0));
  network.at(0) << 0.1, 0.8, 0.7, 0.2;
  network.at(1) << Complex(0.1, 0.3), 0.8, Complex(0.3, -0.4), 0.2;
  const FrequencyResponse response =
      terminated_response(network, Termination{100.0, 0.0, {}}, Termination{100.0, 0.0, {}});
  EXPECT_EQ(response.values, network.parameter(1, 0));  // exact: both reflections are 0
}

TEST(Network, RefusesTerminationsThatDoNotExist) {
  const Network network = empty_network(Eigen::Vector2d(0.0, 1e9), Eigen::Vector2cd(50.0, 50.0));
  const Network one = empty_network(Eigen::Vector2d(0.0, 1e9), Eigen::VectorXcd::Constant(1, 50.0));
  EXPECT_THROW((void)terminated_response(one, {}, {}), std::invalid_argument);
  EXPECT_THROW((void)terminated_response(network, Termination{-1.0, 0.0, {}}, {}),
               std::invalid_argument);
  EXPECT_THROW((void)terminated_response(network, {}, Termination{50.0, -1e-12, {}}),
               std::invalid_argument);
  EXPECT_THROW((void)terminated_response(network, {}, Termination{std::nan(""), 0.0, {}}),
               std::invalid_argument);
  EXPECT_THROW((void)renormalised(network, Eigen::Vector3cd(50.0, 50.0, 50.0)),
               std::invalid_argument);
  EXPECT_THROW((void)renormalised(network, Eigen::Vector2cd(50.0, 0.0)), std::invalid_argument);
  EXPECT_THROW((void)with_ports(network, {3}), std::out_of_range);
  EXPECT_THROW((void)with_port_ended(network, 0, {}), std::out_of_range);
}

/// A matched two-port with delay and one pole of loss.
Network line(const Eigen::VectorXd& frequencies_hz, double delay_s, double pole_hz) {
  Network network = empty_network(frequencies_hz, Eigen::Vector2cd(50.0, 50.0));
  for (Index k = 0; k < frequencies_hz.size(); ++k) {
    const double f = frequencies_hz[k];
    const Complex h =
        std::polar(1.0, -2.0 * std::numbers::pi * f * delay_s) / Complex(1.0, f / pole_hz);
    network.at(k) << 0.0, h, h, 0.0;
  }
  return network;
}

TEST(Network, CascadeOfMatchedLinesMultiplies) {
  const Eigen::VectorXd f = Eigen::VectorXd::LinSpaced(11, 0.0, 1e9);
  const auto result = cascade({line(f, 1e-9, 2e9), line(f, 2e-9, 3e9), line(f, 0.5e-9, 1e9)}, "c");
  ASSERT_TRUE(result);
  const Eigen::VectorXcd wanted = line(f, 1e-9, 2e9).parameter(1, 0).array() *
                                  line(f, 2e-9, 3e9).parameter(1, 0).array() *
                                  line(f, 0.5e-9, 1e9).parameter(1, 0).array();
  EXPECT_LE((result.value->parameter(1, 0) - wanted).cwiseAbs().maxCoeff(), 16 * kEps);
}

TEST(Network, ResamplingErrsByTheFourthPowerOfTheStep) {
  // 0.45 of a turn per coarse step: the delay must be taken out first.
  const double delay_s = 4.5e-9;
  const Eigen::VectorXd wanted_hz = Eigen::VectorXd::LinSpaced(977, 1e7, 9.9e9);
  const auto error = [&](int points) {
    const Network coarse = line(Eigen::VectorXd::LinSpaced(points, 0.0, 1e10), delay_s, 2e9);
    return (resampled(coarse, wanted_hz).values - line(wanted_hz, delay_s, 2e9).values)
        .cwiseAbs()
        .maxCoeff();
  };
  const double at_100_mhz = error(101);
  const double at_50_mhz = error(201);
  // Method: |error| <= (5/384) h^4 max|h''''| = (5/384) (0.1/2)^4 24 = 2e-6 inside a cubic spline;
  // a factor of 16 when the step is halved, 8 allowed for the ends.
  EXPECT_LT(at_100_mhz, 1e-5);
  EXPECT_GT(at_100_mhz / at_50_mhz, 8.0);
}

TEST(Network, CascadeBringsGridsTogetherAndSaysSo) {
  const Network a = line(Eigen::VectorXd::LinSpaced(1001, 0.0, 1e10), 1e-9, 2e9);
  const Network b = line(Eigen::VectorXd::LinSpaced(401, 1e9, 5e9), 2e-9, 3e9);
  const auto result = cascade({a, b}, "pair");
  ASSERT_TRUE(result);
  ASSERT_EQ(result.notes.size(), 1U);
  EXPECT_EQ(to_string(result.notes[0]),
            "pair: warning: the frequency grids differ; all were interpolated onto 401 points from "
            "1 to 5 GHz");
  const Eigen::VectorXd& f = result.value->frequencies_hz;
  EXPECT_EQ(f.size(), 401);
  const Eigen::VectorXcd wanted =
      line(f, 1e-9, 2e9).parameter(1, 0).array() * line(f, 2e-9, 3e9).parameter(1, 0).array();
  // Method: as above with h = 10 MHz over 2 GHz, (5/384) 0.005^4 24 = 2e-10, times 16 for margins.
  EXPECT_LE((result.value->parameter(1, 0) - wanted).cwiseAbs().maxCoeff(), 4e-9);
}

TEST(Network, CascadeRefusesWhatDoesNotFit) {
  const Eigen::VectorXd low = Eigen::VectorXd::LinSpaced(11, 0.0, 1e9);
  const Eigen::VectorXd high = Eigen::VectorXd::LinSpaced(11, 2e9, 3e9);
  const auto text = [](const Result<Network>& result) {
    EXPECT_FALSE(result);
    return result.notes.size() == 1 ? to_string(result.notes[0]) : std::string("?");
  };
  EXPECT_EQ(text(cascade({}, "c")),
            "c: error: found an empty cascade; wanted at least one network");
  EXPECT_EQ(
      text(cascade({line(low, 0, 1e9), line(high, 0, 1e9)}, "c")),
      "c: error: found frequency ranges without a common part; the highest start is 2 GHz, the "
      "lowest end 1 GHz");
  EXPECT_EQ(text(cascade(
                {line(low, 0, 1e9), empty_network(low, Eigen::VectorXcd::Constant(4, 50.0))}, "c")),
            "c: error: found a network with 4 ports at position 2 of the cascade; wanted the same "
            "even number everywhere");
  EXPECT_EQ(text(cascade({empty_network(low, Eigen::VectorXcd::Constant(3, 50.0))}, "c")),
            "c: error: found a network with 3 ports at position 1 of the cascade; wanted the same "
            "even number everywhere");
}

TEST(Ports, ExchangingOutputsTurnsTheSign) {
  Network network = empty_network(Eigen::Vector2d(1e9, 2e9), Eigen::VectorXcd::Constant(4, 50.0));
  for (Index k = 0; k < 2; ++k) {
    // Lines 1 -> 3 and 2 -> 4, uncoupled: the differential path passes the mean of both.
    network.at(k)(2, 0) = network.at(k)(0, 2) = 0.8;
    network.at(k)(3, 1) = network.at(k)(1, 3) = 0.6;
  }
  const auto straight = through_path(network, {{1, 2}, {3, 4}}, "map");
  const auto swapped = through_path(network, {{1, 2}, {4, 3}}, "map");
  ASSERT_TRUE(straight && swapped);
  EXPECT_EQ(straight.value->at(0)(1, 0), Complex(0.7));
  EXPECT_EQ(swapped.value->at(0)(1, 0), Complex(-0.7));
  EXPECT_EQ(straight.value->reference_ohm, Eigen::Vector2cd(100.0, 100.0));
  EXPECT_TRUE(check_polarity(*straight.value, "map").empty());
  const auto notes = check_polarity(*swapped.value, "map");
  ASSERT_EQ(notes.size(), 1U);
  EXPECT_EQ(to_string(notes[0]),
            "map: warning: the path turns the signal's sign; + and - of one side look swapped");
}

TEST(Ports, ComplainsOfMapsThatDoNotFit) {
  const Network network =
      empty_network(Eigen::Vector2d(1e9, 2e9), Eigen::VectorXcd::Constant(4, 50.0));
  const auto text = [&](const PortMap& map) {
    const auto result = through_path(network, map, "map");
    EXPECT_FALSE(result);
    std::string all;
    for (const auto& note : result.notes) all += to_string(note) + "\n";
    return all;
  };
  EXPECT_EQ(
      text({{1, 2}, {3}}),
      "map: error: found ports in [1, 2] and out [3]; wanted one of each (single-ended) or two "
      "of each (differential)\n");
  EXPECT_EQ(text({{0, 2}, {3, 5}}),
            "map: error: found port 0; the file has ports 1 to 4\n"
            "map: error: found port 5; the file has ports 1 to 4\n");
  EXPECT_EQ(text({{1, 2}, {3, 1}}),
            "map: error: found port 1 more than once; wanted each port once\n");
  const auto modes = mixed_mode(network, {{1}, {2}}, "map");
  ASSERT_EQ(modes.notes.size(), 1U);
  EXPECT_EQ(to_string(modes.notes[0]),
            "map: error: found a single-ended port map; modes need two ports on each side");
}

/// Lines near -> far of equal delay; a little of each reaches both ends of the next line in
/// `lines`, the near end at once.
Network lines_network(int ports, const std::vector<Line>& lines, double coupling) {
  const Eigen::VectorXd f = Eigen::VectorXd::LinSpaced(101, 0.0, 1e10);
  Network network = empty_network(f, Eigen::VectorXcd::Constant(ports, 50.0));
  for (Index k = 0; k < f.size(); ++k) {
    const Complex through = 0.8 * std::polar(1.0, -2.0 * std::numbers::pi * f[k] * 1e-9);
    auto s = network.at(k);
    const auto set = [&](int a, int b, Complex value) {
      s(a - 1, b - 1) = s(b - 1, a - 1) = value;
    };
    for (const Line& one : lines) set(one.near, one.far, through);
    for (std::size_t i = 0; i + 1 < lines.size(); i += 2) {
      set(lines[i].near, lines[i + 1].near, coupling);
      set(lines[i].far, lines[i + 1].far, coupling);
      set(lines[i].near, lines[i + 1].far, coupling * through);
      set(lines[i].far, lines[i + 1].near, coupling * through);
    }
  }
  return network;
}

TEST(Ports, FindsTheFarEndOfEachPort) {
  using Lines = std::vector<Line>;
  for (const Lines& lines : {Lines{{1, 3}, {2, 4}}, Lines{{1, 2}, {3, 4}}, Lines{{1, 4}, {2, 3}},
                             Lines{{1, 2}, {4, 3}}, Lines{{1, 3}, {4, 2}}}) {
    const auto found = find_lines(lines_network(4, lines, 0.1), "file");
    ASSERT_TRUE(found);
    EXPECT_EQ(*found.value, lines);
  }
  EXPECT_EQ(*find_lines(lines_network(4, {{1, 2}, {3, 4}}, 0.0), "file").value,
            (Lines{{1, 2}, {3, 4}}));
}

TEST(Ports, GuessesLanesFromTheStrongestCouplingAndSaysSo) {
  const auto four = guess_ports(lines_network(4, {{1, 2}, {3, 4}}, 0.1), "file");
  ASSERT_TRUE(four);
  EXPECT_EQ(*four.value, (std::vector<PortMap>{{{1, 3}, {2, 4}}}));
  ASSERT_EQ(four.notes.size(), 1U);
  EXPECT_EQ(to_string(four.notes[0]),
            "file: warning: no port map given; the data suggest in [1, 3] out [2, 4] (+ first)");
  // Lines 1-5 with 3-7, and 2-6 with 4-8.
  const auto eight = guess_ports(lines_network(8, {{1, 5}, {3, 7}, {2, 6}, {4, 8}}, 0.1), "file");
  ASSERT_TRUE(eight);
  EXPECT_EQ(*eight.value, (std::vector<PortMap>{{{1, 3}, {5, 7}}, {{2, 4}, {6, 8}}}));
  const auto two = guess_ports(line(Eigen::Vector2d(1e9, 2e9), 0.0, 1e9), "file");
  ASSERT_TRUE(two);
  EXPECT_TRUE(two.notes.empty());
  EXPECT_EQ(*two.value, (std::vector<PortMap>{{{1}, {2}}}));
}

TEST(Ports, RefusesToGuessWhereTheDataDoNotTell) {
  Network network = lines_network(4, {{1, 2}, {3, 4}}, 0.0);
  for (Index k = 0; k < network.num_points(); ++k) network.at(k)(3, 0) = 0.9;
  const auto result = guess_ports(network, "file");
  ASSERT_FALSE(result);
  EXPECT_EQ(to_string(result.notes[0]),
            "file: error: port 1 sends most to port 4, which sends most to port 3; the data don't "
            "tell which port is the far end of which, give a port map");
  const auto odd =
      guess_ports(empty_network(Eigen::Vector2d(1e9, 2e9), Eigen::Vector3cd(1, 1, 1)), "file");
  ASSERT_FALSE(odd);
  EXPECT_EQ(to_string(odd.notes[0]),
            "file: error: found 3 ports; lines have two each, so that a port map must be given");
  const auto six = guess_ports(lines_network(6, {{1, 2}, {3, 4}, {5, 6}}, 0.0), "file");
  ASSERT_FALSE(six);
  EXPECT_EQ(to_string(six.notes[0]),
            "file: error: found 3 lines; differential pairs need an even number, give a port map");
}

// The data set's description: ports 1 and 2 in, 3 and 4 out.
TEST(Ports, GuessesTheMapOfTheSimulatedPairs) {
  for (const char* name : {"coupled_pair_fixtured.s4p", "coupled_pair_through.s4p"}) {
    const auto path = test::measured_file(name);
    if (!path) GTEST_SKIP() << test::kNoMeasuredFiles;
    const auto network = parse_touchstone(test::bytes_of(*path), *path);
    ASSERT_TRUE(network);
    const auto lanes = guess_ports(*network.value, name);
    ASSERT_TRUE(lanes);
    EXPECT_EQ(*lanes.value, (std::vector<PortMap>{{{1, 2}, {3, 4}}}));
    EXPECT_TRUE(
        check_polarity(*through_path(*network.value, {{1, 2}, {3, 4}}, name).value, name).empty());
    EXPECT_FALSE(
        check_polarity(*through_path(*network.value, {{1, 2}, {4, 3}}, name).value, name).empty());
  }
}

}  // namespace
}  // namespace tapwright
