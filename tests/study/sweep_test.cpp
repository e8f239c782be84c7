// Points, shared settings and the switch table of a sweep.

#include "tapwright/study/sweep.hpp"

#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <fstream>

#include "support/input_files.hpp"
#include "tapwright/base/units.hpp"
#include "tapwright/eye/score.hpp"
#include "tapwright/study/knob_sensitivity.hpp"

namespace tapwright {
namespace {

/// Two-tap FIR by 0.05 on a pulse with one post-cursor, which an axis sets; one sample per UI.
const char* const kLink = R"({
  "format": "tapwright.link/1",
  "signal": {"symbol_rate_gbd": 1, "span_ui": [2, 4]},
  "channel": {"pulse": {"samples_v": [0, 1.0, 0.3, 0], "samples_per_ui": 1}},
  "transmitter": {"swing_mvppd": 1000,
    "fir": [{"position": 0, "rule": "remainder"},
            {"position": 1, "min": -0.5, "max": 0, "step": 0.05}]},
  "target": {"eye_height_mv": 400}
})";

class Sweep : public testing::Test {
 protected:
  Study study_of(const std::string& axes, const std::string& more = "") {
    const std::string folder = testing::TempDir();
    std::ofstream(folder + "/sweep_link.json") << kLink;
    Result<Study> study = parse_study(R"({"format": "tapwright.study/1", "link": "sweep_link.json",
      "axes": [)" + axes + "]" + more + "}", "study.json", folder);
    for (const Diagnostic& note : study.notes) ADD_FAILURE() << to_string(note);
    return *study.value;
  }
  /// Post-cursor against main cursor 1 V.
  static std::string posts(const std::string& from, const std::string& to, const std::string& step) {
    return R"({"name": "post", "key": "channel.pulse.samples_v[2]", "from": )" + from + R"(, "to": )" +
           to + R"(, "step": )" + step + "}";
  }
};

std::vector<SweepRecord> records_of(const Study& study, const SweepPlan& plan, int num_threads,
                                    const SweepPart& part = {}) {
  std::vector<SweepRecord> records;
  RunControl control;
  control.num_threads = num_threads;
  run_points(study, plan, part, 0, [&](const SweepRecord& r) {
    records.push_back(r);
    return true;
  }, {}, control);
  return records;
}

SweepSummary summary_of(const Study& study, const SweepPlan& plan,
                        const std::vector<SweepRecord>& records) {
  SweepSummary summary(study, plan);
  for (const SweepRecord& r : records) summary.add(r);
  return summary;
}

/// Worst-case eye in mV of pulse (1, p) through taps (1 - c, -c) at 500 mV peak, no DFE: cursors
/// 1 - c, p(1 - c) - c, -p c.
double eye_mv(double p, double c) {
  return 1000.0 * ((1.0 - c) - std::abs(p * (1.0 - c) - c) - p * c);
}

TEST_F(Sweep, EachPointHasTheBestOfItsCodes) {
  const Study study = study_of(posts("0", "0.5", "0.125"));
  const SweepPlan plan = plan_sweep(study);
  for (const SweepRecord& r : records_of(study, plan, 1)) {
    const double p = 0.125 * static_cast<double>(r.point);
    double best = -1e9;
    for (int code = 0; code <= 10; ++code) best = std::max(best, eye_mv(p, 0.05 * code));
    EXPECT_NEAR(r.eye_mv, best, 1e-9) << p;  // rounding of a few sums of numbers below 1000
    EXPECT_EQ(r.proof, "proven");
  }
}

TEST_F(Sweep, TheOneSettingHasTheLargestLeastEyeOfAllCodes) {
  const Study study = study_of(posts("0", "0.5", "0.125"));
  const SweepPlan plan = plan_sweep(study);
  const SweepSummary summary = summary_of(study, plan, records_of(study, plan, 1));
  double best = -1e9;
  for (int code = 0; code <= 10; ++code) {
    double least = 1e9;
    for (int i = 0; i <= 4; ++i) least = std::min(least, eye_mv(0.125 * i, 0.05 * code));
    best = std::max(best, least);
  }
  ASSERT_TRUE(summary.one_for_all());
  EXPECT_NEAR(*summary.of_shared[*summary.one_for_all()].least_margin_mv, best - 400.0, 1e-9);
  ASSERT_TRUE(plan.shared_bound_mv);
  EXPECT_NEAR(*plan.shared_bound_mv, best - 400.0, 1e-6);  // the search's own tolerance, 1 nV
}

TEST_F(Sweep, TheOneSettingIsNoWorseOverTheSetThanAnyPointsOwnBest) {
  const Study study = study_of(
      posts("0", "0.5", "0.125") +
      R"(, {"name": "pre", "key": "channel.pulse.samples_v[0]", "values": [0, 0.1, -0.1]})");
  const SweepPlan plan = plan_sweep(study);
  const std::vector<SweepRecord> records = records_of(study, plan, 1);
  const SweepSummary summary = summary_of(study, plan, records);
  ASSERT_TRUE(summary.one_for_all());
  const double robust_mv = *summary.of_shared[*summary.one_for_all()].least_margin_mv + 400.0;
  for (const SweepRecord& own : records) {
    double least_mv = 1e9;
    for (std::int64_t p = 0; p < study.num_points(); ++p) {
      const Result<Link> link = read_link(study.link, study.changes(study.places(p)));
      const EyeModel model = prepare(*link.value);
      Settings settings;
      settings.fir.resize(2);
      settings.fir << own.knobs[1].value, own.knobs[2].value;
      settings.dfe_v.resize(0);
      least_mv = std::min(
          least_mv, v_to_mv(objective_height_v(model, readapted(model, settings))));
    }
    EXPECT_GE(robust_mv, least_mv - 1e-9) << own.point;  // rounding
  }
}

TEST_F(Sweep, TheSwitchTableIsTheFewestThatCodesAllow) {
  // A second post-cursor of 0.25 makes codes trade off: q_1 = p(1-c) - c, q_2 = 0.25(1-c) - pc and
  // q_3 = -0.25c, so that a post-cursor of 0 allows c <= 0.15 and one of 0.5 asks for c >= 0.2.
  const auto tailed_eye_mv = [](double post, double c) {
    return 1000.0 * ((1.0 - c) - std::abs(post * (1.0 - c) - c) - std::abs(0.25 * (1.0 - c) - post * c) - 0.25 * c);
  };
  const Study study = study_of(posts("0", "0.5", "0.0625"),
      R"(, "changes": {"target.eye_height_mv": 450, "channel.pulse.samples_v[3]": 0.25})");
  const SweepPlan plan = plan_sweep(study);
  const SweepSummary summary = summary_of(study, plan, records_of(study, plan, 1));
  const std::vector<SwitchStretch> table = summary.switch_table();
  // By hand: from the left, always the code that carries furthest; over all codes there are.
  int fewest = 0;
  for (int at = 0; at <= 8;) {
    int furthest = at;
    for (int code = 0; code <= 10; ++code) {
      int to = at;
      while (to <= 8 && tailed_eye_mv(0.0625 * to, 0.05 * code) >= 450.0 - 1e-9) ++to;
      furthest = std::max(furthest, to);
    }
    ASSERT_GT(furthest, at);
    at = furthest;
    ++fewest;
  }
  ASSERT_GE(fewest, 2);
  EXPECT_EQ(static_cast<int>(table.size()), fewest);
  EXPECT_EQ(plan.fewest_settings, fewest);
  EXPECT_EQ(table.front().from, 0);
  EXPECT_EQ(table.back().to, 8);
  for (std::size_t i = 0; i < table.size(); ++i) {
    ASSERT_TRUE(table[i].shared);
    EXPECT_GE(*table[i].least_margin_mv, 0.0);
    if (i > 0) { EXPECT_EQ(table[i].from, table[i - 1].to + 1); }
  }
  EXPECT_EQ(summary.met_by_table(), 9);
}

TEST_F(Sweep, TheSwitchTableIsTheFewestThatTheSwingsAllow) {
  // A flat pulse of one UI and height a: the eye is swing x a, and so is the receiver's input. The
  // target is 250 mV, the limit 600 mVppd: from the left, always the swing that carries furthest.
  const std::string link = R"({"format": "tapwright.link/1", "signal": {"symbol_rate_gbd": 1, "span_ui": [2, 2]},
    "channel": {"pulse": {"samples_v": [0, 0, 1, 1, 0, 0], "samples_per_ui": 2}},
    "transmitter": {"swing_mvppd": [300, 600, 1000]},
    "receiver": {"peak_input_mvppd": 600}, "target": {"eye_height_mv": 250}})";
  const std::string folder = testing::TempDir();
  std::ofstream(folder + "/swing_link.json") << link;
  const Result<Study> read = parse_study(
      R"({"format": "tapwright.study/1", "link": "swing_link.json", "axes": [{"name": "height",
          "key": "channel.pulse.at_swing_mvppd", "from": 2000, "to": 6500, "step": 250}]})",
      "study.json", folder);
  ASSERT_TRUE(read) << to_string(read.notes.front());
  const Study& study = *read.value;
  const SweepPlan plan = plan_sweep(study);
  const SweepSummary summary = summary_of(study, plan, records_of(study, plan, 1));
  // Taken at a larger swing, the same record is a smaller pulse: a = 2000 / at_swing.
  std::vector<std::pair<int, int>> wanted;
  for (int at = 0; at < 19;) {
    int furthest = at;
    for (const double swing : {300.0, 600.0, 1000.0}) {
      int to = at;
      for (; to < 19; ++to) {
        const double eye_mv = swing * 2000.0 / (2000.0 + 250.0 * to);
        if (eye_mv < 250.0 || eye_mv > 600.0 * (1.0 + 1e-12)) break;
      }
      furthest = std::max(furthest, to);
    }
    ASSERT_GT(furthest, at);
    wanted.emplace_back(at, furthest - 1);
    at = furthest;
  }
  ASSERT_EQ(wanted.size(), 2u);
  const std::vector<SwitchStretch> table = summary.switch_table();
  ASSERT_EQ(table.size(), wanted.size());
  EXPECT_EQ(plan.fewest_settings, 2);
  for (std::size_t i = 0; i < table.size(); ++i) {
    ASSERT_TRUE(table[i].shared);
    EXPECT_EQ(table[i].from, wanted[i].first);
    EXPECT_EQ(table[i].to, wanted[i].second);
    EXPECT_GE(*table[i].least_margin_mv, 0.0);
  }
  EXPECT_EQ(summary.met_by_table(), 19);
}

TEST_F(Sweep, ATargetOutOfReachLeavesAGapInTheTable) {
  const Study study = study_of(posts("0", "0.75", "0.25"), R"(, "changes": {"target.eye_height_mv": 900})");
  const SweepPlan plan = plan_sweep(study);
  const std::vector<SwitchStretch> table =
      summary_of(study, plan, records_of(study, plan, 1)).switch_table();
  ASSERT_EQ(table.size(), 2u);  // only the first point reaches 900 mV: 1000 at no post-cursor
  EXPECT_TRUE(table[0].shared);
  EXPECT_FALSE(table[1].shared);
  EXPECT_LT(*table[1].least_margin_mv, 0.0);
}

TEST_F(Sweep, ThreadsAndPartsChangeNothing) {
  const Study study = study_of(
      posts("0", "0.5", "0.03125") +
      R"(, {"name": "spread", "draws": 3, "spread": {"transmitter.swing_mvppd": 20}})");
  const SweepPlan plan = plan_sweep(study);
  const std::vector<SweepRecord> alone = records_of(study, plan, 1);
  EXPECT_EQ(static_cast<std::int64_t>(alone.size()), study.num_points());
  EXPECT_EQ(records_of(study, plan, 4), alone);
  std::vector<SweepRecord> merged;
  for (std::int64_t i = 0; i < 5; ++i) {
    const auto part = records_of(study, plan, 2, {i, 5});
    EXPECT_EQ(static_cast<std::int64_t>(part.size()), (SweepPart{i, 5}.size(study.num_points())));
    merged.insert(merged.end(), part.begin(), part.end());
  }
  std::sort(merged.begin(), merged.end(),
            [](const SweepRecord& a, const SweepRecord& b) { return a.point < b.point; });
  EXPECT_EQ(merged, alone);
}

TEST_F(Sweep, APointWithoutAValidLinkIsToldAndCountsAsMissed) {
  // The two axes are valid one by one; at post 1 and pre 1 no sample is largest, so that is no
  // fault. A pulse without a positive sample is one.
  const Study study = study_of(
      R"({"name": "main", "key": "channel.pulse.samples_v[1]", "values": [1, 0]},
         {"name": "post", "key": "channel.pulse.samples_v[2]", "values": [0.3, 0]})");
  const SweepPlan plan = plan_sweep(study);
  const std::vector<SweepRecord> records = records_of(study, plan, 1);
  // main 1, then main 0; post 0.3 and 0 each.
  EXPECT_EQ(records[2].problem, "");
  EXPECT_NE(records[3].problem.find("no sample is above 0"), std::string::npos) << records[3].problem;
  const SweepSummary summary = summary_of(study, plan, records);
  EXPECT_EQ(summary.failed, 1);
  EXPECT_EQ(summary.done, 4);
}

TEST_F(Sweep, StopsWhenAskedAndGoesOnWhereItWas) {
  const Study study = study_of(posts("0", "0.5", "0.03125"));
  const SweepPlan plan = plan_sweep(study);
  std::vector<SweepRecord> records;
  std::int64_t taken = run_points(study, plan, {}, 0, [&](const SweepRecord& r) {
    if (records.size() == 5) return false;
    records.push_back(r);
    return true;
  });
  EXPECT_EQ(taken, 5);
  taken += run_points(study, plan, {}, taken, [&](const SweepRecord& r) {
    records.push_back(r);
    return true;
  });
  EXPECT_EQ(taken, study.num_points());
  EXPECT_EQ(records, records_of(study, plan, 1));
}

}  // namespace
}  // namespace tapwright
