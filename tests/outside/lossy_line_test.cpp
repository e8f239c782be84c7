// checks.md row 17: a lossy line with terminations and a shunt capacitor against ngspice.

#include <gtest/gtest.h>

#include <cmath>
#include <filesystem>

#include "support/process.hpp"
#include "tapwright/base/fft.hpp"
#include "tapwright/channel/capture.hpp"
#include "tapwright/channel/line_model.hpp"
#include "tapwright/channel/network_operations.hpp"
#include "tapwright/channel/received_spectrum.hpp"

namespace tapwright {
namespace {

TEST(LossyLine, StepMatchesACircuitSimulator) {
  test::Conditions conditions;
  conditions.program = "/usr/bin/ngspice";
  if (!std::filesystem::exists(conditions.program)) GTEST_SKIP() << "ngspice is not installed";
  const test::ScratchFolder scratch;
  conditions.folder = scratch.path();
  const test::Finished run =
      test::run_process({"-b", TAPWRIGHT_SOURCE_DIR "/tests/outside/lossy_line.cir"}, conditions);
  ASSERT_EQ(run.code, 0) << run.err;
  const Result<Capture> simulated = read_capture(scratch / "step.csv");  // brings it to even times
  ASSERT_TRUE(simulated) << to_string(simulated.notes[0]);

  const double ui_s = 100e-12;
  const int m = 32;
  const RlgcLine line{20.0, 300e-9, 0.0, 120e-12};
  const Eigen::VectorXd f = modelled_frequencies_hz(1 / ui_s, line_delay_s(line, 0.4, 1e9));
  Termination source, load;
  source.resistance_ohm = 65.0;
  load.resistance_ohm = 40.0;
  load.capacitance_f = 1e-12;
  const auto received = received_spectrum(
      terminated_response(line_network(line, 0.4, f, 50.0), source, load), {ui_s, m}, {}, "line");
  ASSERT_TRUE(received);
  const Eigen::VectorXd pulse = real_record(received.value->values, received.value->num_samples);
  // A step is a pulse and all pulses before it; an edge of one UI is the mean of a UI of steps. The
  // transfer function counts from half the open-circuit voltage, and the source steps by 1 V.
  Eigen::VectorXd step = 0.5 * pulse, edge = Eigen::VectorXd::Zero(pulse.size());
  for (Eigen::Index i = m; i < step.size(); ++i) step[i] += step[i - m];
  for (Eigen::Index i = m; i < edge.size(); ++i) {  // trapezoid rule
    edge[i] = step.segment(i - m, m + 1).mean() * (m + 1) / m - 0.5 * (step[i - m] + step[i]) / m;
  }

  const Capture& want = *simulated.value;
  const double final_v = 40.0 / (65.0 + 40.0 + 20.0 * 0.4);
  EXPECT_NEAR(want.samples_v[want.samples_v.size() - 1], final_v, 1e-3 * final_v);
  double largest = 0.0;
  for (Eigen::Index i = 0; i < want.samples_v.size(); ++i) {
    const double t = want.start_s + static_cast<double>(i) * want.dt_s;
    const double at = (t - received.value->start_s) / (ui_s / m);
    const auto k = static_cast<Eigen::Index>(at);
    const double got = std::lerp(edge[k], edge[k + 1], at - static_cast<double>(k));
    largest = std::max(largest, std::abs(got - want.samples_v[i]));
  }
  // The row's own limit, 2 % of the final value: the simulator's steps are 5 ps.
  EXPECT_LT(largest, 0.02 * final_v);
  RecordProperty("largest_percent", std::to_string(100 * largest / final_v));
  std::printf("largest difference from ngspice: %.2f %% of the final value\n",
              100 * largest / final_v);
}

}  // namespace
}  // namespace tapwright
