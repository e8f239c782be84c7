// Channels of a link file: what comes out must not depend on how the same channel is written.

#include <gtest/gtest.h>

#include <cmath>
#include <filesystem>
#include <numbers>

#include "link/folder.hpp"
#include "support/input_files.hpp"
#include "support/measured_data.hpp"
#include "tapwright/base/digest.hpp"
#include "tapwright/base/fft.hpp"
#include "tapwright/base/text.hpp"
#include "tapwright/channel/line_model.hpp"
#include "tapwright/channel/pattern.hpp"
#include "tapwright/channel/touchstone.hpp"
#include "tapwright/link/read_link.hpp"

namespace tapwright {
namespace {

using test::Folder;

Result<Link> with_channel(const std::string& channel, const std::string& folder = "",
                          const std::string& more = "") {
  return parse_link(R"({"format": "tapwright.link/1", "signal": {"symbol_rate_gbd": 6.25},
      "channel": )" + channel +
                        more + "}",
                    "link.json", folder, {{"transmitter.rise_time_ps", "60"}});
}

Eigen::VectorXd record(const Result<Link>& link) {
  for (const Diagnostic& note : link.notes) ADD_FAILURE() << to_string(note);
  if (!link) return Eigen::VectorXd::Zero(1);
  return real_record(link.value->channel.values, link.value->channel.num_samples);
}

double difference(const Eigen::VectorXd& a, const Eigen::VectorXd& b) {
  const Eigen::Index n = std::min(a.size(), b.size());
  EXPECT_GT(n, 1000);
  return (a.head(n) - b.head(n)).cwiseAbs().maxCoeff();
}

const char* const kCable =
    R"("loss_db_per_m": [[1, 0.9], [3.125, 1.75]], "delay_ns_per_m": 4.6, "impedance_ohm": )";

std::string cable(double length_m, double impedance_ohm = 100.0) {
  return "{\"length_m\": " + std::to_string(length_m) + ", " + kCable +
         std::to_string(impedance_ohm) + "}";
}

TEST(ChannelReader, APulseThroughAMatchedLosslessEndKeepsItsArea) {
  // Nothing is lost at DC, so the samples add up to one UI of 1 V: samples_per_ui volts.
  const Eigen::VectorXd p = record(with_channel("{\"line\": " + cable(2.0) + "}"));
  // Method: the record is cut where the skin effect's tail, going with t^(-3/2), still carries a
  // share of about sqrt(time constant / record) of the area; 1 % for this cable.
  EXPECT_NEAR(p.sum(), 32.0, 0.32);
  EXPECT_GT(p.maxCoeff(), 0.3);
}

TEST(ChannelReader, ALineCutInTwoIsTheSameLine) {
  const Eigen::VectorXd one = record(with_channel("{\"line\": " + cable(3.0) + "}"));
  const Eigen::VectorXd two = record(with_channel("{\"cascade\": [{\"line\": " + cable(1.25) +
                                                  "}, {\"line\": " + cable(1.75) + "}]}"));
  // Rounding only: the cascade of matched lines multiplies what the one line adds up.
  EXPECT_LT(difference(one, two), 1e-10);
}

TEST(ChannelReader, ALineInATouchstoneFileIsTheSameLine) {
  const Folder folder;
  const DatasheetLine sheet{{{1e9, 0.9}, {3.125e9, 1.75}}, 4.6e-9, 100.0};
  const Eigen::VectorXd frequencies_hz =
      modelled_frequencies_hz(6.25e9, line_delay_s(sheet, 3.0, 3.125e9));
  const Network line = line_network(sheet, 3.0, frequencies_hz, 100.0);
  folder.write("cables/line.s2p", write_touchstone(line));
  const Result<Link> link =
      with_channel(R"({"touchstone": {"file": "cables/line.s2p"}})", folder.path());
  // Exact: the file holds the same doubles, on the same frequencies.
  EXPECT_EQ(difference(record(link), record(with_channel("{\"line\": " + cable(3.0) + "}"))), 0.0);
  ASSERT_TRUE(link);
  ASSERT_EQ(link.value->inputs.size(), 2U);
  EXPECT_EQ(link.value->inputs[1].path, folder.path() + "/cables/line.s2p");
  EXPECT_EQ(link.value->inputs[1].sha256, sha256_hex(test::bytes_of(link.value->inputs[1].path)));
}

TEST(ChannelReader, RepeatsListsAndCascadesOfOneFileAgree) {
  const Folder folder;
  const DatasheetLine sheet{{{1e9, 0.9}, {3.125e9, 1.75}}, 4.6e-9, 95.0};
  folder.write("l.s2p", write_touchstone(line_network(
                            sheet, 0.5, Eigen::VectorXd::LinSpaced(2501, 0.0, 25e9), 100.0)));
  const std::string file = R"({"file": "l.s2p", "ports": {"in": [2], "out": [1]}})";
  const auto p = [&](const std::string& channel) {
    return record(with_channel(channel, folder.path()));
  };
  const Eigen::VectorXd listed = p("{\"touchstone\": [" + file + "," + file + "]}");
  EXPECT_EQ(listed,
            p("{\"cascade\": [{\"touchstone\": " + file + "}, {\"touchstone\": " + file + "}]}"));
  EXPECT_EQ(listed, p(R"({"touchstone": {"file": "l.s2p", "repeat": 2}})"));
}

TEST(ChannelReader, AMeasuredPieceAndALineJoinOnFinerFrequenciesWhereTheDelayAsksForThem) {
  const Folder folder;
  const DatasheetLine sheet{{{1e9, 0.9}, {3.125e9, 1.75}}, 4.6e-9, 100.0};
  // 40 MHz a point: enough for 0.2 m (0.92 ns), too coarse for 5 m more (23 ns).
  folder.write("l.s2p", write_touchstone(line_network(
                            sheet, 0.2, Eigen::VectorXd::LinSpaced(626, 0.0, 25e9), 100.0)));
  const Eigen::VectorXd joined = record(with_channel(
      R"({"cascade": [{"touchstone": {"file": "l.s2p"}}, {"line": )" + cable(5.0) + "}]}",
      folder.path()));
  const Eigen::VectorXd line = record(with_channel("{\"line\": " + cable(5.2) + "}"));
  // Method: the two are sampled in frequency differently, so that the skin effect's slow tail
  // comes round in a record of another length; under a thousandth of the peak.
  EXPECT_LT(difference(joined, line), 1e-3 * line.maxCoeff());
}

TEST(ChannelReader, TerminationsDivideTheVoltageAsOhmsLawSays) {
  // A line of no length between 100 ohm and 50 ohm: 2 * 50 / (100 + 50) of the matched amplitude.
  const auto peak = [](const std::string& more) {
    return record(with_channel("{\"line\": " + cable(0.0) + "}", "", more)).maxCoeff();
  };
  // Rounding only.
  EXPECT_NEAR(peak(R"(, "receiver": {"impedance_ohm": 50})") / peak(""), 2.0 / 3.0, 1e-12);
  EXPECT_NEAR(peak(R"(, "transmitter": {"impedance_ohm": 50})") / peak(""), 4.0 / 3.0, 1e-12);
}

TEST(ChannelReader, EveryFormOfALineReads) {
  const char* const forms[] = {
      R"({"length_m": 0.151, "a1_sqrt_ns_per_mm": 4.114e-4, "a2_ns_per_mm": 2.547e-4,
          "tau_ns_per_mm": 6.191e-3, "impedance_ohm": 109.8})",
      R"({"length_m": 1, "l_nh_per_m": 500, "c_pf_per_m": 50, "r_ohm_per_m": 5})",
      R"({"length_m": 0.2, "microstrip": {"width_mm": 0.3, "height_mm": 0.17,
          "thickness_mm": 0.035}, "dielectric": {"eps_r": 4.2, "tan_delta": 0.02}})",
      R"({"length_m": 0.2, "stripline": {"width_mm": 0.15, "plane_spacing_mm": 0.4,
          "thickness_mm": 0.018}, "dielectric": {"eps_r": 3.7, "tan_delta": 0.01},
          "conductor": {"roughness_um": 1.5, "temperature_c": 60}})",
      R"({"length_m": 1, "coax": {"inner_diameter_mm": 0.5, "outer_diameter_mm": 1.65},
          "dielectric": {"eps_r": 2.1, "tan_delta": 0.0005}})",
      R"({"length_m": 2, "wire_pair": {"gauge_awg": 28, "spacing_mm": 0.9},
          "dielectric": {"eps_r": 1.9, "tan_delta": 0.001}})"};
  for (const char* form : forms) {
    const Result<Link> link = with_channel(std::string("{\"line\": ") + form + "}");
    ASSERT_TRUE(link) << form << (link.notes.empty() ? "" : to_string(link.notes[0]));
    EXPECT_GT(real_record(link.value->channel.values, link.value->channel.num_samples).maxCoeff(),
              0.1)
        << form;
  }
}

TEST(ChannelReader, LumpedElementsDoWhatTheirFormulasSay) {
  const auto p = [](const std::string& channel) { return record(with_channel(channel)); };
  const Eigen::VectorXd through = p("{\"line\": " + cable(0.0) + "}");
  // A shunt of 50 ohm between 100 ohm and 100 ohm: 33.3 ohm in place of 100 ohm at the load, so
  // 2 * 33.3 / 133.3 = 1/2. A series of 200 ohm: 2 * 100 / 400 = 1/2. Rounding only.
  const Eigen::VectorXd shunt = p(R"({"lumped": [{"shunt": {"resistance_ohm": 50}}]})");
  const Eigen::VectorXd series = p(R"({"lumped": [{"series": {"resistance_ohm": 200}}]})");
  EXPECT_LT(difference(shunt, 0.5 * through), 1e-12);
  EXPECT_LT(difference(series, 0.5 * through), 1e-12);
  // A matched section without loss only delays: by 160 ps, which is one UI or 32 samples.
  const Eigen::VectorXd section =
      p(R"({"lumped": [{"section": {"impedance_ohm": 100, "delay_ps": 160}}]})");
  EXPECT_LT(difference(section.tail(section.size() - 32), through.head(through.size() - 32)), 1e-9);
}

TEST(ChannelReader, AFixtureHalfIsTakenOut) {
  const Folder folder;
  const Eigen::VectorXd f = Eigen::VectorXd::LinSpaced(2501, 0.0, 25e9);
  const DatasheetLine sheet{{{1e9, 0.9}, {3.125e9, 1.75}}, 4.6e-9, 95.0};
  const auto line = [&](double length_m) { return line_network(sheet, length_m, f, 100.0); };
  folder.write("whole.s2p", write_touchstone(line(1.0)));
  folder.write("half.s2p", write_touchstone(line(0.3)));
  folder.write("rest.s2p", write_touchstone(line(0.4)));
  const Eigen::VectorXd rest =
      record(with_channel(R"({"touchstone": {"file": "rest.s2p"}})", folder.path()));
  const Eigen::VectorXd taken_out = record(with_channel(
      R"({"touchstone": {"file": "whole.s2p", "fixture_in": {"file": "half.s2p"},
          "fixture_out": {"file": "half.s2p"}}})",
      folder.path()));
  // Rounding, made larger by the inversion of two halves of 2 dB and less.
  EXPECT_LT(difference(rest, taken_out), 1e-9);
}

TEST(ChannelReader, AMeasuredLineCanBeStretchedAndMadeLossier) {
  const Folder folder;
  // A matched line, loss by a square-root and a linear law: stretching its transmission is a longer
  // line, adding 0.1 dB and 0.3 dB at 1 GHz a lossier one.
  const Eigen::VectorXd f = Eigen::VectorXd::LinSpaced(2501, 0.0, 25e9);
  const auto write = [&](const std::string& name, double skin_db, double linear_db,
                         double length_m) {
    const DatasheetLine sheet{
        {{1e9, skin_db + linear_db}, {4e9, 2 * skin_db + 4 * linear_db}}, 4.6e-9, 100.0};
    folder.write(name, write_touchstone(line_network(sheet, length_m, f, 100.0)));
  };
  write("short.s2p", 0.8, 0.2, 1.0);
  write("long.s2p", 0.8, 0.2, 1.5);
  write("lossy.s2p", 0.9, 0.5, 1.0);
  const auto p = [&](const std::string& file) {
    return record(with_channel("{\"touchstone\": {\"file\": " + file + "}}", folder.path()));
  };
  // Rounding; the loss's own dispersion (the annex ties phase to loss) does not follow an added
  // loss, so that the lossier line differs by that much: a few parts in a thousand.
  EXPECT_LT(difference(p(R"("short.s2p", "stretch": 1.5)"), p("\"long.s2p\"")), 1e-9);
  EXPECT_NEAR(p(R"("short.s2p", "extra_skin_loss_db": 0.1, "extra_dielectric_loss_db": 0.3)").sum(),
              p("\"lossy.s2p\"").sum(), 0.05);
  EXPECT_NEAR(
      p(R"("short.s2p", "extra_skin_loss_db": 0.1, "extra_dielectric_loss_db": 0.3)").maxCoeff(),
      p("\"lossy.s2p\"").maxCoeff(), 0.02);
}

TEST(ChannelReader, PortsOfAFourPortFileAreFoundAndTold) {
  const Folder folder;
  const Network line = line_network(DatasheetLine{{{1e9, 2.0}, {5e9, 6.0}}, 6e-9, 50.0}, 0.3,
                                    Eigen::VectorXd::LinSpaced(2501, 0.0, 25e9), 50.0);
  // Two such lines side by side, ports 1 and 2 near, 3 and 4 far, with weak coupling.
  Network pair = empty_network(line.frequencies_hz, Eigen::VectorXcd::Constant(4, 50.0));
  for (Eigen::Index k = 0; k < line.num_points(); ++k) {
    for (const auto& [near, far] : {std::pair(0, 2), std::pair(1, 3)}) {
      pair.at(k)(far, near) = line.at(k)(1, 0);
      pair.at(k)(near, far) = line.at(k)(0, 1);
    }
    pair.at(k)(1, 0) = pair.at(k)(0, 1) = pair.at(k)(3, 2) = pair.at(k)(2, 3) = 0.01;
  }
  folder.write("pair.s4p", write_touchstone(pair));
  const Result<Link> found = with_channel(R"({"touchstone": {"file": "pair.s4p"}})", folder.path());
  const Result<Link> given = with_channel(
      R"({"touchstone": {"file": "pair.s4p", "ports": {"in": [1, 2], "out": [3, 4]}}})",
      folder.path());
  ASSERT_TRUE(found);
  EXPECT_EQ(found.notes.size(), 1U);  // what was taken
  EXPECT_EQ(real_record(found.value->channel.values, found.value->channel.num_samples),
            record(given));
}

TEST(LinkCache, ChangesNoResultAndNoticesAFileThatChanged) {
  const Folder folder;
  const DatasheetLine sheet{{{1e9, 0.9}, {3.125e9, 1.75}}, 4.6e-9, 95.0};
  const auto write = [&](double length_m) {
    folder.write("l.s2p",
                 write_touchstone(line_network(
                     sheet, length_m, Eigen::VectorXd::LinSpaced(1501, 0.0, 15e9), 100.0)));
  };
  const std::string text = R"({"format": "tapwright.link/1", "signal": {"symbol_rate_gbd": 6.25},
      "channel": {"touchstone": {"file": "l.s2p"}}})";
  const auto read = [&](LinkCache* cache, const std::vector<LinkChange>& changes) {
    return parse_link(text, "link.json", folder.path(), changes, cache);
  };
  LinkCache cache(2);
  const std::vector<std::vector<LinkChange>> variants = {{},
                                                         {{"jitter.random_ui", "0.02"}},
                                                         {{"transmitter.rise_time_ps", "40"}},
                                                         {{"channel.touchstone.repeat", "3"}},
                                                         {},
                                                         {{"receiver.impedance_ohm", "90"}},
                                                         {}};
  for (const double length_m : {0.5, 0.7}) {
    write(length_m);
    for (const auto& changes : variants) {
      const Result<Link> with = read(&cache, changes);
      const Result<Link> without = read(nullptr, changes);
      ASSERT_TRUE(with && without);
      EXPECT_EQ(with.value->channel.values, without.value->channel.values);
      EXPECT_EQ(with.notes, without.notes);
      ASSERT_EQ(with.value->inputs.size(), 2U);
      EXPECT_EQ(with.value->inputs[1].sha256, without.value->inputs[1].sha256);
    }
  }
  std::filesystem::remove(folder.path() + "/l.s2p");
  EXPECT_FALSE(read(&cache, {}));
}

/// A pulse of 8 UI at 6.25 GBd, 0 at both ends, at time t_s.
double smooth(double t_s) {
  const double x = t_s / (8 * 160e-12);
  return x <= 0.0 || x >= 1.0 ? 0.0 : 0.8 * std::pow(std::sin(std::numbers::pi * x), 6);
}

TEST(ChannelReader, CapturesOfOneChannelAgree) {
  const Folder folder;
  std::string pulse = "time [ps];value [mV]\n";
  std::string step = "t,v\n";
  for (int i = 0; i < 20 * 16; ++i) {
    const double t_s = i * 10e-12;
    pulse += std::to_string(i * 10) + ";" + std::to_string(300 * smooth(t_s)) + "\n";
    // The step that differs by this pulse from itself one UI later: the sum of pulses so far.
    double sum = 0.0;
    for (int k = 0; k <= 20; ++k) sum += 0.5 * smooth(t_s - k * 160e-12);
    step += std::to_string(i * 1e-2) + "," + std::to_string(sum) + "\n";
  }
  folder.write("pulse.csv", pulse);
  folder.write("step.csv", step);
  const auto p = [&](const std::string& channel) {
    const Result<Link> link = with_channel(channel, folder.path());
    for (const Diagnostic& note : link.notes) {
      EXPECT_EQ(note.severity, Diagnostic::Severity::kWarning) << to_string(note);
    }
    return link ? real_record(link.value->channel.values, link.value->channel.num_samples)
                : Eigen::VectorXd(Eigen::VectorXd::Zero(1));
  };
  const Eigen::VectorXd from_pulse =
      p(R"({"pulse_csv": {"file": "pulse.csv", "at_swing_mvppd": 600}})");
  const Eigen::VectorXd from_step =
      p(R"({"step_csv": {"file": "step.csv", "step_mv": 500, "format": {"time_unit": "ns"}}})");
  for (const Eigen::VectorXd& samples : {from_pulse, from_step}) {
    // The curve's own height; it was written in steps of a microvolt and then interpolated.
    EXPECT_NEAR(samples.maxCoeff(), 0.8, 1e-4);
    EXPECT_NEAR(samples.sum() / 32, 0.8 * 8 * 5.0 / 16, 1e-3);  // mean of sin^6: 5/16
  }
}

TEST(ChannelReader, AWaveformOfAKnownPatternGivesItsPulse) {
  const Folder folder;
  const Pattern pattern = *pattern_named("prbs9", "").value;
  const Eigen::VectorXd levels = symbols(pattern, 100, 600);
  std::string csv = "s,V\n";
  for (int i = 0; i < 590 * 8; ++i) {
    const double t_s = i * 20e-12;
    double v = 0.0;
    for (int k = std::max(0, i / 8 - 9); k <= i / 8; ++k)
      v += levels[k] * smooth(t_s - k * 160e-12);
    if (i >= 80) csv += exact(t_s) + "," + exact(0.3 * v) + "\n";
  }
  folder.write("w.csv", csv);
  const Result<Link> link = with_channel(
      R"({"waveform_csv": {"file": "w.csv", "pattern": "prbs9", "at_swing_mvppd": 600,
          "pre_ui": 6, "post_ui": 12}})",
      folder.path());
  ASSERT_TRUE(link) << to_string(link.notes[0]);
  const Eigen::VectorXd p =
      real_record(link.value->channel.values, link.value->channel.num_samples);
  // Method: the capture has 8 samples per UI of a curve without content above a third of a UI.
  EXPECT_NEAR(p.maxCoeff(), 0.8, 1e-2);
  EXPECT_NEAR(p.sum() / 32, 0.8 * 8 * 5.0 / 16, 2e-2);
}

TEST(ChannelReader, ADeviceFileStandsInAndItsNamesCountFromItsOwnFolder) {
  const Folder folder;
  folder.write("parts/device.json", R"({"format": "tapwright.device/1",
      "transmitter": {"swing_mvppd": [400, 800]},
      "receiver": {"bandwidth_ghz": 5, "ctle": [{"code": 4, "response": {"file": "ctle.csv"}}]},
      "registers": [{"field": "SWING", "address": "0x10", "bits": [0, 0], "knob": "swing"}]})");
  folder.write("parts/ctle.csv", "f_hz,gain_db,phase_deg\n0,-6,0\n1e9,-3,10\n5e9,0,-20\n");
  const Result<Link> link =
      with_channel("{\"line\": " + cable(1.0) + "}", folder.path(),
                   R"(, "device": "parts/device.json", "transmitter": {"swing_mvppd": 600})");
  for (const Diagnostic& note : link.notes) ADD_FAILURE() << to_string(note);
  ASSERT_TRUE(link);
  const Device& device = link.value->device;
  EXPECT_EQ(device.transmitter.swings, (std::vector<Swing>{{0, 0.3}}));  // the link's own
  EXPECT_EQ(device.receiver.bandwidth_hz, 5e9);
  ASSERT_EQ(device.receiver.ctle.size(), 1U);
  const auto& ctle = std::get<CtleMeasured>(device.receiver.ctle[0].response);
  EXPECT_EQ(ctle.frequencies_hz, Eigen::Vector3d(0, 1e9, 5e9));
  EXPECT_NEAR(std::abs(ctle.values[1]), 0.70794578, 1e-8);  // 10^(-3/20), printed to 1e-8
  EXPECT_NEAR(std::arg(ctle.values[1]), 10 * std::numbers::pi / 180, 1e-15);
  ASSERT_EQ(link.value->registers.size(), 1U);
  EXPECT_EQ(link.value->registers[0].address, 16U);
  ASSERT_EQ(link.value->inputs.size(), 3U);
  EXPECT_EQ(link.value->inputs[1].path, folder.path() + "/parts/device.json");
  EXPECT_EQ(link.value->inputs[2].path, folder.path() + "/parts/ctle.csv");
}

TEST(ChannelReader, AFaultInADeviceFileNamesThatFile) {
  const Folder folder;
  folder.write("device.json", R"({"format": "tapwright.device/1",
      "transmitter": {"fir": [{"position": 0, "min": 1, "max": 0.5}]}})");
  const Result<Link> link =
      with_channel("{\"line\": " + cable(1.0) + "}", folder.path(), R"(, "device": "device.json")");
  ASSERT_EQ(link.notes.size(), 1U);
  EXPECT_EQ(
      to_string(link.notes[0]),
      folder.path() + "/device.json:2: error: transmitter.fir[0].min: min 1 lies above max 0.5");
}

TEST(Samples, AllReadWithoutANote) {
  int num_links = 0;
  for (const auto& entry : std::filesystem::directory_iterator(TAPWRIGHT_SOURCE_DIR "/channels")) {
    const std::string name = entry.path().filename().string();
    if (!name.starts_with("camera_") || entry.path().extension() != ".json") continue;
    const Result<Link> link = read_link(entry.path().string());
    for (const Diagnostic& note : link.notes) ADD_FAILURE() << to_string(note);
    ASSERT_TRUE(link);
    EXPECT_EQ(link.value->registers.size(), 8U);
    ++num_links;
  }
  EXPECT_EQ(num_links, 4);
}

TEST(Samples, TheExampleReadsWithoutANoteAndNamesNoFile) {
  const Result<Link> link = parse_link(example_link(), "example.json", "/nonexistent");
  for (const Diagnostic& note : link.notes) ADD_FAILURE() << to_string(note);
  ASSERT_TRUE(link);
  EXPECT_EQ(link.value->inputs.size(), 1U);
}

TEST(ChannelReader, MeasuredBoardsReadAndCascade) {
  const auto path = test::measured_file("microstrip_200mm.s2p");
  if (!path) GTEST_SKIP() << test::kNoMeasuredFiles;
  const std::string folder = std::filesystem::path(*path).parent_path().string();
  const auto peak = [&](int repeat) {
    const Result<Link> link =
        with_channel(R"({"touchstone": {"file": "microstrip_200mm.s2p", "repeat": )" +
                         std::to_string(repeat) + "}}",
                     folder);
    EXPECT_TRUE(link);
    return link
               ? real_record(link.value->channel.values, link.value->channel.num_samples).maxCoeff()
               : 0.0;
  };
  const double once = peak(1);
  EXPECT_GT(once, 0.5);
  EXPECT_LT(once, 1.0);
  EXPECT_LT(peak(3), once);
}

}  // namespace
}  // namespace tapwright
