#include "tapwright/channel/capture.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <string>

#include "support/input_files.hpp"

namespace tapwright {
namespace {

Capture parsed(std::string_view text, const CaptureFormat& format = {}) {
  const Result<Capture> result = parse_capture(text, "x.csv", format);
  for (const Diagnostic& note : result.notes) ADD_FAILURE() << to_string(note);
  return result ? *result.value : Capture{};
}

void expect_three(const Capture& c, double start_s, double dt_s, const Eigen::Vector3d& samples_v) {
  ASSERT_EQ(c.samples_v.size(), 3);
  // Rounding: one product by the unit, one subtraction and division.
  EXPECT_NEAR(c.start_s, start_s, 1e-15 * std::abs(start_s));
  EXPECT_NEAR(c.dt_s, dt_s, 4e-16 * std::abs(start_s) + 1e-15 * dt_s);
  for (int i = 0; i < 3; ++i) {
    EXPECT_NEAR(c.samples_v[i], samples_v[i], 1e-15 * std::abs(samples_v[i])) << i;
  }
}

const Eigen::Vector3d kVolts(0.25, -0.5, 0.125);

TEST(Capture, ReadsEveryDialect) {
  // The same three points in the ways that oscilloscopes and spreadsheets write them.
  for (const char* text : {
           "1e-9,0.25\n2e-9,-0.5\n3e-9,0.125\n",
           "1e-9,0.25\r\n2e-9,-0.5\r\n3e-9,0.125",
           "\xEF\xBB\xBFTime,Volt\n1e-9,0.25\n2e-9,-0.5\n3e-9,0.125\n",
           "Time (ns);CH1 (mV)\n1;250\n2;-500\n3;125\n",
           "Zeit [ns];Spannung [V]\n1,0;0,25\n2,0;-0,5\n3,0;0,125\n",
           "t/ps\tu/mV\n1000\t250\n2000\t-500\n3000\t125\n",
           "time_us\tv_uV\n0,001\t250000\n0,002\t-500000\n0,003\t125000\n",
           "time in \xC2\xB5s,\xC2\xB5V\n0.001,250000\n0.002,-500000\n0.003,125000\n",
           "1e-9 0.25\n2e-9 -0.5\n3e-9 0.125\n",
           "  1e-9   0.25\n  2e-9  -0.5\n  3e-9   0.125\n",
           "Time (ns) Voltage (mV)\n1,0 250,0\n2,0 -500,0\n3,0 125,0\n",
           "1e-9, 0.25\n2e-9, -0.5\n3e-9, 0.125\n",
           "\"Time (ns)\",\"V\"\n\"1\",\"0.25\"\n\"2\",\"-0.5\"\n\"3\",\"0.125\"\n",
           "\"1,0\",\"0,25\"\n\"2,0\",\"-0,5\"\n\"3,0\",\"0,125\"\n",
           "1e-9,0.25,\n2e-9,-0.5,\n\n3e-9,0.125,\n\n",
           "# "
           "one\nModel,XY\nScale,2,5\nPoints,3\nSecond,Volt\n+1.0E-09,+2.5E-01\n+2.0E-09,-5.0E-01\n"
           "+3.0E-09,+1.25E-01\n",
       }) {
    SCOPED_TRACE(text);
    const std::string shown(text);
    const bool in_nanoseconds = shown.find("\"1,0\",") == 0;
    const Capture c = parsed(text);
    expect_three(c, in_nanoseconds ? 1.0 : 1e-9, in_nanoseconds ? 1.0 : 1e-9, kVolts);
  }
}

TEST(Capture, ReadsRowsThatStandBesideTheHeading) {
  std::string text = "Record Length,6,Points,0,1\nInterval,1e-9,s,1e-9,2\n";
  text += ",,,2e-9,3\n,,,3e-9,4\n,,,4e-9,5\n,,,5e-9,6\n";
  const Capture c = parsed(text);
  ASSERT_EQ(c.samples_v.size(), 6);
  EXPECT_EQ(c.samples_v[0], 1.0);
  EXPECT_EQ(c.samples_v[5], 6.0);
}

TEST(Capture, TakesUnitsAndColumnsAsTold) {
  CaptureFormat format;
  format.time_unit_s = 1e-12;
  format.value_unit_v = 1e-3;
  format.value_column = 3;
  format.minus_column = 2;
  expect_three(parsed("1000,-100,150\n2000,300,-200\n3000,0,125\n", format), 1e-9, 1e-9, kVolts);
}

TEST(Capture, ReadsValuesAloneWhenTheStepIsTold) {
  CaptureFormat format;
  format.dt_s = 5e-12;
  expect_three(parsed("mV\n250\n-500\n125\n", format), 0.0, 5e-12, kVolts);
}

TEST(Capture, KeepsAnEvenClockThatWasPrintedWithFewDigits) {
  // 1 ps steps at 1 us with seven digits: times repeat and jump by 1e-13 * 10.
  std::string text;
  for (int i = 0; i < 2000; ++i) {
    char row[64];
    std::snprintf(row, sizeof row, "%.4e,%d\n", 1e-6 + i * 1e-12, i % 7);
    text += row;
  }
  const Capture c = parsed(text);
  ASSERT_EQ(c.samples_v.size(), 2000);
  EXPECT_NEAR(c.dt_s, 1e-12, 1e-10 / 1999);  // the last digit of the first and last time
}

TEST(Capture, BringsUnevenTimesToAnEvenGrid) {
  const Result<Capture> result = parse_capture("0,0\n1,1\n1.5,1.5\n4,4\n6,6\n", "sim.csv");
  ASSERT_TRUE(result);
  ASSERT_EQ(result.notes.size(), 1u);
  EXPECT_NE(result.notes[0].message.find("times are uneven, steps from 0.5 s to 2.5 s"),
            std::string::npos);
  const Capture& c = *result.value;
  for (Eigen::Index i = 0; i < c.samples_v.size(); ++i) {  // a straight line stays one: rounding
    EXPECT_NEAR(c.samples_v[i], static_cast<double>(i) * c.dt_s, 1e-14);
  }
  EXPECT_NEAR(static_cast<double>(c.samples_v.size() - 1) * c.dt_s, 6.0, 1e-14);
}

TEST(Capture, SeesAFewShortStepsAtTheStartOfASimulation) {
  // As circuit simulators begin: the mean step is then not the usual one.
  std::string text = "0 0\n1e-13 0.01\n3e-13 0.03\n7e-13 0.07\n";
  for (int i = 1; i <= 300; ++i) {
    text += std::to_string(i) + "e-12 " + std::to_string(0.1 * i) + "\n";
  }
  const Result<Capture> result = parse_capture(text, "sim.txt");
  ASSERT_TRUE(result);
  EXPECT_EQ(result.notes.size(), 1u);
  const Capture& c = *result.value;
  for (Eigen::Index i = 0; i < c.samples_v.size(); ++i) {  // a straight line stays one: rounding
    EXPECT_NEAR(c.samples_v[i], static_cast<double>(i) * c.dt_s * 1e11, 1e-12);
  }
}

TEST(Capture, RefusesAColumnWithoutNumbers) {
  CaptureFormat format;
  format.value_column = 3;
  const Result<Capture> result = parse_capture("0,1,a\n1,2,b\n", "x.csv", format);
  ASSERT_FALSE(result);
  EXPECT_EQ(to_string(result.notes[0]),
            "x.csv: error: column 3 holds no numbers; wanted one of 1, 2");
}

TEST(Capture, FileThatIsNotThereIsNamed) {
  const Result<Capture> result = read_capture("no/such/file.csv");
  ASSERT_FALSE(result);
  EXPECT_EQ(result.notes[0].file, "no/such/file.csv");
}

constexpr double kUi = 100e-12;

/// Step response of one pole behind a delay, 5 ps apart.
Capture one_pole_step(double tau_s, double delay_s, double height_v, double offset_v) {
  Capture c{Eigen::VectorXd(800), 0.0, 5e-12};
  for (int i = 0; i < 800; ++i) {
    const double t = i * 5e-12 - delay_s;
    c.samples_v[i] = offset_v + (t > 0 ? height_v * (1 - std::exp(-t / tau_s)) : 0.0);
  }
  return c;
}

TEST(Capture, StepBecomesThePulseOfOneUi) {
  // checks.md row 4b's channel: 1 - e^{-t/tau} for one UI, then the decay, exact.
  const double tau = 80e-12, delay = 300e-12;
  const Result<PulseResponse> pulse =
      pulse_from_step(one_pole_step(tau, delay, 0.4, 0.05), {kUi, 20}, 0.4, "step.csv");
  ASSERT_TRUE(pulse);
  EXPECT_TRUE(pulse.notes.empty());
  for (Eigen::Index i = 0; i < 700; ++i) {
    const double t = static_cast<double>(i) * 5e-12 - delay;
    const auto s = [&](double x) { return x > 0 ? 1 - std::exp(-x / tau) : 0.0; };
    EXPECT_NEAR(pulse.value->at(i), s(t) - s(t - kUi), 1e-14) << i;  // rounding
  }
}

TEST(Capture, PulseIsScaledToOneVoltLaunch) {
  // Taken at 800 mVppd, that is a launch of 0.4 V.
  Capture c{Eigen::VectorXd::Zero(200), 0.0, 5e-12};
  c.samples_v[60] = 0.2;
  const Result<PulseResponse> pulse = pulse_from_pulse(c, {kUi, 20}, 0.4, "pulse.csv");
  ASSERT_TRUE(pulse);
  EXPECT_EQ(pulse.value->peak_index(), 60);
  EXPECT_DOUBLE_EQ(pulse.value->at(60), 0.5);
}

TEST(Capture, RecordIsResampledOntoTheGrid) {
  // A Gaussian of 60 ps at 7 ps steps onto 100/32 ps.
  const auto at = [](double t) { return std::exp(-0.5 * std::pow((t - 600e-12) / 60e-12, 2)); };
  Capture c{Eigen::VectorXd(200), 0.0, 7e-12};
  for (int i = 0; i < 200; ++i) c.samples_v[i] = at(i * 7e-12);
  const Result<PulseResponse> pulse = pulse_from_pulse(c, {kUi, 32}, 1.0, "pulse.csv");
  ASSERT_TRUE(pulse);
  for (Eigen::Index i = 0; i < pulse.value->size(); ++i) {
    // Method: h^6 / 720 times the sixth derivative, at most 15 / 60^6: 5e-8, with a margin of 2.
    EXPECT_NEAR(pulse.value->at(i), at(static_cast<double>(i) * kUi / 32), 1e-7) << i;
  }
}

TEST(Capture, RefusesWhatCannotBeAPulse) {
  const Capture flat{Eigen::VectorXd::Constant(100, 0.3), 0.0, 5e-12};
  EXPECT_EQ(to_string(pulse_from_step(flat, {kUi, 20}, 1.0, "s.csv").notes.at(0)),
            "s.csv: error: found a flat record; wanted a pulse");
  const Capture in_seconds{Eigen::VectorXd::Random(100), 0.0, 5.0};
  EXPECT_EQ(
      to_string(pulse_from_step(in_seconds, {kUi, 20}, 1.0, "s.csv").notes.at(0)),
      "s.csv: error: found 100 samples 5 s apart, 2e-11 in a unit interval of 1e-10 s; wanted "
      "a record of at least one UI with 2 samples or more in each; is the unit of time right?");
  EXPECT_EQ(to_string(pulse_from_step(flat, {kUi, 20}, 0.0, "s.csv").notes.at(0)),
            "s.csv: error: found a step of 0 V; wanted one above 0");
  EXPECT_EQ(to_string(pulse_from_pulse(flat, {kUi, 20}, -1.0, "s.csv").notes.at(0)),
            "s.csv: error: found a launch of -1 V; wanted one above 0");
}

TEST(Capture, SaysWhenThePolarityLooksWrong) {
  const Result<PulseResponse> pulse =
      pulse_from_step(one_pole_step(80e-12, 300e-12, -0.4, 0.0), {kUi, 20}, 0.4, "step.csv");
  ASSERT_TRUE(pulse);
  ASSERT_EQ(pulse.notes.size(), 1u);
  EXPECT_NE(pulse.notes[0].message.find("is the polarity right?"), std::string::npos);
}

class BadCapture : public testing::TestWithParam<std::string> {};

TEST_P(BadCapture, IsRefusedWithItsNotes) {
  const std::string folder = TAPWRIGHT_SOURCE_DIR "/tests/bad/capture/";
  const Result<Capture> capture = parse_capture(test::bytes_of(folder + GetParam()), GetParam());
  std::string notes;
  for (const Diagnostic& note : capture.notes) notes += to_string(note) + "\n";
  EXPECT_EQ(notes, test::bytes_of(folder + GetParam() + ".expect"));
  EXPECT_FALSE(capture);
}

INSTANTIATE_TEST_SUITE_P(Files, BadCapture,
                         testing::ValuesIn(test::files_with_expectation("tests/bad/capture")),
                         [](const auto& file) { return test::test_name_of(file.param); });

}  // namespace
}  // namespace tapwright
