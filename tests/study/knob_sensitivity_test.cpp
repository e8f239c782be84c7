#include "tapwright/study/knob_sensitivity.hpp"

#include <gtest/gtest.h>

#include "tapwright/link/read_link.hpp"
#include "tapwright/search/solve.hpp"

namespace tapwright {
namespace {

// Where the best is proven, no step within the limits can win anything, whatever follows: also not
// one that the receiver's input limit forbids.
TEST(KnobSensitivity, NoStepFromAProvenOptimumWins) {
  const auto link = parse_link(R"({
    "format": "tapwright.link/1", "signal": {"symbol_rate_gbd": 5, "samples_per_ui": 8, "span_ui": [4, 30]},
    "channel": {"line": {"length_m": 1.5, "loss_db_per_m": [[1, 1.5], [2.5, 2.7]], "delay_ns_per_m": 4.6,
                         "impedance_ohm": 100}},
    "transmitter": {"swing_mvppd": [600, 800, 1000], "fir": [
      {"position": -1, "min": -0.1, "max": 0, "step": 0.025}, {"position": 0, "rule": "remainder"},
      {"position": 1, "min": -0.3, "max": 0, "step": 0.025}]},
    "receiver": {"bandwidth_ghz": 3.75, "peak_input_mvppd": 520,
      "ctle": {"dc_gain_db": [0, -2, -4], "f_z_ghz": 1.25, "poles_ghz": [1.25, 5]},
      "dfe": [{"max_mv": 30, "step_mv": 2}]}})", "l", "");
  ASSERT_TRUE(link);
  const EyeModel model = prepare(*link.value);
  const Solution solution = solve(model);
  ASSERT_EQ(solution.proof.kind, Proof::Kind::kProven);
  int num_forbidden = 0;
  for (const KnobSensitivity& s : knob_sensitivity(model, solution.settings)) {
    for (const auto* change : {&s.down, &s.up}) {
      if (!*change) {
        ++num_forbidden;
        continue;
      }
      EXPECT_LE((*change)->fixed_v, 1e-12) << s.knob.name;
      EXPECT_LE((*change)->readapted_v, 1e-12) << s.knob.name;
      EXPECT_GE((*change)->readapted_v, (*change)->fixed_v) << s.knob.name;
    }
  }
  EXPECT_GT(num_forbidden, 0);
}

}  // namespace
}  // namespace tapwright
