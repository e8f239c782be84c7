#include "tapwright/study/audit.hpp"

#include <gtest/gtest.h>

#include <cmath>

#include "tapwright/link/read_link.hpp"
#include "tapwright/study/knob_sensitivity.hpp"

namespace tapwright {
namespace {

// One invented cable at several lengths, without a line code so that the tests stay quick.
Link cable(double length_m) {
  const std::string text = R"({
    "format": "tapwright.link/1", "name": "cable",
    "signal": {"symbol_rate_gbd": 6.25, "span_ui": [6, 60]},
    "channel": {"line": {"length_m": )" + std::to_string(length_m) + R"(,
      "loss_db_per_m": [[1.0, 1.7], [3.125, 3.2]], "delay_ns_per_m": 4.6, "impedance_ohm": 100}},
    "transmitter": {"swing_mvppd": 800, "rise_time_ps": 45, "fir": [
      {"position": -1, "min": -0.15, "max": 0, "step": 0.025},
      {"position": 0, "rule": "remainder"},
      {"position": 1, "min": -0.3, "max": 0, "step": 0.025}]},
    "receiver": {"bandwidth_ghz": 4.7,
      "ctle": {"dc_gain_db": [0, -1, -2, -3, -4, -5, -6, -7, -8], "f_z_ghz": 1.5625, "poles_ghz": [1.5625, 6.25]},
      "dfe": [{"max_mv": 40, "step_mv": 2}, {"max_mv": 20, "step_mv": 2}],
      "noise": {"density_v2_per_ghz": 5.2e-8}},
    "target": {"eye_height_mv": 1}})";
  const auto link = parse_link(text, "cable.json", "");
  if (!link) {
    for (const Diagnostic& note : link.notes) ADD_FAILURE() << to_string(note);
    throw std::runtime_error("bad link");
  }
  return *link.value;
}

ReadBackLane lane_with(const EyeModel& model, const std::string& name, const Settings& settings) {
  ReadBackLane lane;
  lane.lane = name;
  lane.line = 2;
  for (const KnobReading& r : readings(model.link.device, settings)) {
    if (r.code) lane.knobs[r.knob.name] = *r.code;
  }
  return lane;
}

struct Bench {
  std::vector<EyeModel> models;
  std::vector<ReadBackLane> lanes;
  std::vector<Settings> best;
};

Bench bench_of(const std::vector<double>& lengths_m) {
  Bench bench;
  for (std::size_t i = 0; i < lengths_m.size(); ++i) {
    bench.models.push_back(prepare(cable(lengths_m[i])));
    SearchOptions options;
    options.compare = false;
    const Solution solution = solve(bench.models.back(), options);
    EXPECT_EQ(solution.proof.kind, Proof::Kind::kProven);
    bench.best.push_back(solution.settings);
    bench.lanes.push_back(lane_with(bench.models.back(), "L" + std::to_string(i), solution.settings));
  }
  return bench;
}

bool says(const AuditedLane& lane, const std::string& words) {
  for (const std::string& remark : lane.remarks) {
    if (remark.find(words) != std::string::npos) return true;
  }
  return false;
}

TEST(Audit, PassesATableOfOptimalCodesWithGapZero) {
  const Bench bench = bench_of({1.0, 3.0, 5.0});
  const auto audit = audit_lanes(bench.lanes, bench.models, "table.csv");
  ASSERT_TRUE(audit);
  EXPECT_TRUE(audit.value->passed());
  for (const AuditedLane& lane : audit.value->lanes) {
    EXPECT_NEAR(lane.gap_v, 0.0, 1e-12) << lane.lane;
    EXPECT_TRUE(lane.costs.empty()) << lane.lane;
    EXPECT_TRUE(lane.remarks.empty()) << lane.remarks.front();
  }
}

TEST(Audit, NamesEachPlantedFault) {
  Bench bench = bench_of({1.0, 1.75, 2.5, 3.5, 4.5, 5.5});
  // Lane 2 over-peaked by two codes; lane 3 with its post tap at the rail; lanes 0 and 5 with their
  // channels swapped.
  Settings peaked = bench.best[2];
  peaked.ctle_index += 2;
  ASSERT_LT(peaked.ctle_index, bench.models[2].link.device.receiver.ctle.size());
  bench.lanes[2] = lane_with(bench.models[2], "L2", peaked);
  const Knob post = knobs_of(bench.models[3].link.device)[3];
  ASSERT_EQ(post.name, "fir:1");
  Settings railed = bench.best[3];
  const auto& codes = bench.models[3].link.device.transmitter.fir.taps[2].codes;
  ASSERT_GT(nearest_code(codes, railed.fir[2]), 1u);
  railed.fir[2] = codes.front().value;
  railed.fir = with_remainder(bench.models[3].link.device.transmitter.fir, railed.fir);
  bench.lanes[3] = lane_with(bench.models[3], "L3", railed);
  std::swap(bench.models[0], bench.models[5]);

  AuditOptions options;
  options.tolerance_db = 0.5;
  const auto audit = audit_lanes(bench.lanes, bench.models, "table.csv", options);
  ASSERT_TRUE(audit);
  const auto& lanes = audit.value->lanes;
  EXPECT_TRUE(lanes[1].passed && lanes[4].passed);
  EXPECT_FALSE(lanes[2].passed);
  ASSERT_FALSE(lanes[2].costs.empty());
  EXPECT_EQ(lanes[2].costs.front().knob.name, "ctle");
  EXPECT_EQ(lanes[2].costs.front().codes_off, 2);
  EXPECT_TRUE(says(lanes[2], "ctle stands at"));
  EXPECT_TRUE(says(lanes[2], "2 codes up"));
  EXPECT_FALSE(lanes[3].passed);
  EXPECT_TRUE(says(lanes[3], "fir:1 at the lower end of its range"));
  ASSERT_FALSE(lanes[0].passed && lanes[5].passed);
  EXPECT_TRUE(says(lanes[0], "fit the channel of lane L5"));
  EXPECT_TRUE(says(lanes[5], "fit the channel of lane L0"));
  for (const std::size_t other : {1u, 2u, 3u, 4u}) EXPECT_FALSE(says(lanes[other], "swapped")) << other;
  EXPECT_FALSE(audit.value->passed());
}

TEST(Audit, PartsAddUpToTheGapAndRestoringEveryKnobClosesIt) {
  Bench bench = bench_of({3.0});
  Settings worse = bench.best[0];
  worse.ctle_index += 1;
  for (const int knob : {1, 3}) {
    const auto there = moved(bench.models[0].link.device, worse, knobs_of(bench.models[0].link.device)[static_cast<std::size_t>(knob)], -1, 0.1);
    if (there) worse = *there;
  }
  bench.lanes[0] = lane_with(bench.models[0], "L0", worse);
  const auto audit = audit_lanes(bench.lanes, bench.models, "table.csv");
  ASSERT_TRUE(audit);
  const AuditedLane& lane = audit.value->lanes[0];
  const auto& p = lane.parts;
  EXPECT_NEAR(p.state_v + p.objective_v + p.phase_v + p.clipping_v + p.quantisation_v + p.unexplained_v,
              lane.best_v - lane.height_v, 1e-12);  // rounding
  EXPECT_GE(p.state_v, -1e-12);
  EXPECT_GT(lane.gap_v, 0.0);
  // Knob costs are what the score says when one knob is put back by hand.
  for (const KnobCost& cost : lane.costs) {
    if (cost.knob.kind != Knob::Kind::kCtle) continue;
    Settings s = lane.read_back;
    s.ctle_index = lane.best.settings.ctle_index;
    EXPECT_NEAR(cost.gain_v, objective_height_v(bench.models[0], s) - lane.height_v, 1e-15);
  }
}

TEST(Audit, WithMeasuredHeightsNamesTheLaneThatDisagrees) {
  Bench bench = bench_of({1.0, 2.0, 3.0, 4.0, 5.0});
  const auto plain = audit_lanes(bench.lanes, bench.models, "t");
  ASSERT_TRUE(plain);
  const double scatter[] = {1.01, 0.99, 1.005, 0.995, 1.0};
  for (std::size_t i = 0; i < 5; ++i) {
    bench.lanes[i].eye_height_v = 0.9 * scatter[i] * plain.value->lanes[i].height_v;
  }
  bench.lanes[1].eye_height_v = 0.6 * plain.value->lanes[1].height_v;
  const auto audit = audit_lanes(bench.lanes, bench.models, "t");
  ASSERT_TRUE(audit);
  ASSERT_TRUE(audit.value->gain);
  EXPECT_NEAR(*audit.value->gain, 0.9, 0.01);
  for (std::size_t i = 0; i < 5; ++i) EXPECT_EQ(says(audit.value->lanes[i], "expected from the other lanes"), i == 1) << i;
  ASSERT_TRUE(audit.value->rank_correlation);
  EXPECT_LE(*audit.value->rank_correlation, 1.0);
}

TEST(Audit, AnswersTheSameForAnyNumberOfThreads) {
  const Bench bench = bench_of({2.0, 4.0});
  RunControl two;
  two.num_threads = 2;
  const auto a = audit_lanes(bench.lanes, bench.models, "t");
  const auto b = audit_lanes(bench.lanes, bench.models, "t", {}, two);
  ASSERT_TRUE(a && b);
  for (std::size_t i = 0; i < 2; ++i) {
    EXPECT_EQ(a.value->lanes[i].height_v, b.value->lanes[i].height_v);
    EXPECT_EQ(a.value->lanes[i].parts.objective_v, b.value->lanes[i].parts.objective_v);
  }
}

TEST(Adaptation, FindsTheLeastMeanSquareTapsOfATwoTapChannel) {
  // p = (1, a) with a DFE that takes a off: nothing is left to equalise, so the FIR stays flat and
  // the DFE settles at a times the swing.
  const auto link = parse_link(R"({
    "format": "tapwright.link/1", "signal": {"symbol_rate_gbd": 1},
    "channel": {"pulse": {"samples_v": [0.5, 0.2], "samples_per_ui": 1}},
    "transmitter": {"swing_mvppd": 2000, "fir": [{"position": 0, "rule": "remainder"},
      {"position": 1, "min": -0.5, "max": 0, "step": 0.05}]},
    "receiver": {"dfe": [{"max_mv": 300, "step_mv": 10}], "noise": {"rms_mv": 5}}})", "l", "");
  ASSERT_TRUE(link);
  const EyeModel model = prepare(*link.value);
  const Adaptation a = adaptation(model, 0, 0);
  EXPECT_NEAR(a.settled.fir[0], 1.0, 1e-12);
  EXPECT_NEAR(a.settled.fir[1], 0.0, 1e-12);
  EXPECT_NEAR(a.settled.dfe_v[0], 0.2, 1e-12);
  // Joint optimum: no code nearby has a better mean square.
  for (double post = -0.5; post <= 0.0; post += 0.05) {
    Settings s = a.joint;
    s.fir = Eigen::Vector2d(1.0 + post, post);
    EXPECT_LE(mean_square_ratio(model, s), mean_square_ratio(model, a.joint) * (1.0 + 1e-9)) << post;
  }
}

}  // namespace
}  // namespace tapwright
