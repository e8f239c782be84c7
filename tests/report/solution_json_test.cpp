// The signal part of the result file: what a reader can replay with it.

#include <gtest/gtest.h>

#include <cmath>
#include <nlohmann/json.hpp>
#include <sstream>
#include <string>

#include "support/sample_link.hpp"
#include "tapwright/report/solution_report.hpp"

namespace tapwright {
namespace {

// Reading the file alone: the symbols, sent through the cursors of the link, leave the eye height
// that the file states; the characters are the symbols' own, ten each.
TEST(SolutionJson, TheWorstSequenceReplaysTheWorstCase) {
  Eigen::VectorXd pulse(12);
  pulse << 0.02, -0.05, 1.0, 0.21, -0.13, 0.08, 0.06, -0.04, 0.03, 0.02, 0.01, -0.01;
  Link link = test::link_of_pulse(pulse, 1);
  link.signal.line_code.kind = LineCodeKind::k8b10b;
  link.device.receiver.noise_rms_v = 0.0;
  link.device.receiver.dfe = {{1, 0.1, false, {}}};
  link.high_pass_hz = 1e5;
  const EyeModel model = prepare(link);
  Solution solution;
  solution.settings = test::plain_settings(link);
  solution.settings.dfe_v[0] = 0.1;
  solution.score = score(model, solution.settings);
  const auto json = nlohmann::json::parse(json_of(report_on(model, solution)));

  const auto symbols = json["worst_sequence"]["symbols"].get<std::string>();
  const auto main_at = json["worst_sequence"]["main_at"].get<Eigen::Index>();
  const auto symbol = [&](Eigen::Index at) {
    return symbols.at(static_cast<std::size_t>(at)) == '1' ? 1.0 : -1.0;
  };
  double level_v = -0.1 * symbol(main_at - 1);  // the DFE
  for (Eigen::Index k = -2; k < 10; ++k) level_v += pulse[k + 2] * symbol(main_at - k);
  EXPECT_NEAR(2e3 * level_v * symbol(main_at),
              json["score"]["eye_height_worst_case_mv"].get<double>(), 1e-9);
  EXPECT_EQ(json["worst_sequence"]["characters"].size(), symbols.size() / 10);

  // One tap: a burst ends with the first correct decision, so lengths are geometric.
  const auto lengths = json["error_bursts"]["length_probability"].get<std::vector<double>>();
  EXPECT_NEAR(json["error_bursts"]["mean_errors"].get<double>() * lengths[0], 1.0, 1e-9);
  // At most six tails of w T = 6.3e-4 under the code, against the whole amplitude.
  const auto& wander = json["baseline_wander_mv"];
  EXPECT_GT(wander["worst"].get<double>(), wander["rms"].get<double>());
  EXPECT_GT(wander["worst_independent_symbols"].get<double>(), 250 * wander["worst"].get<double>());
}

}  // namespace
}  // namespace tapwright
