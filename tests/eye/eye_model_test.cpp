#include "tapwright/eye/eye_model.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <map>
#include <random>

#include "support/sample_link.hpp"

namespace tapwright {
namespace {

using test::link_of_pulse;

/// A rise of one UI, then a tail that falls by `ratio` per UI.
Eigen::VectorXd geometric_tail(int num_ui, int per_ui, double ratio) {
  Eigen::VectorXd p(num_ui * per_ui);
  for (Eigen::Index i = 0; i < p.size(); ++i) {
    const double t = static_cast<double>(i) / per_ui - 3.0;
    p[i] = t < -1.0 ? 0.0 : t < 0.0 ? 1.0 + t : std::pow(ratio, t);
  }
  return p;
}

// Derived: beyond n UI the cursors add up to ratio^(n+1) / (1 - ratio) at the peak's phase; half a
// UI early they are 1/sqrt(ratio) times that, the most over the phases around the peak.
TEST(EyeModel, KeepsTheSpanUntilTheRestIsNegligible) {
  for (const double ratio : {0.5, 0.8, 0.93}) {
    Link link = link_of_pulse(geometric_tail(400, 8, ratio), 8);
    link.signal.span_ui.reset();
    const EyeModel model = prepare(link);
    int n = 0;
    while (std::pow(ratio, n + 0.5) / (1.0 - ratio) >= 0.002) ++n;
    EXPECT_EQ(model.span_ui[1], n) << ratio;
    // Half a UI late the rise still shows one UI before; nothing two before.
    EXPECT_EQ(model.span_ui[0], 1) << ratio;
    EXPECT_LT(model.outside_span_v, 0.002);
    EXPECT_EQ(model.span_reason, "beyond it the cursors add up to less than 0.2 % of the peak");
  }
}

TEST(EyeModel, KeepsTheSpanThatIsGivenAndSaysWhatLiesOutside) {
  Link link = link_of_pulse(geometric_tail(60, 1, 0.5), 1);
  link.signal.span_ui = {1, 4};
  const EyeModel model = prepare(link);
  EXPECT_EQ(model.span_ui, (std::array<int, 2>{1, 4}));
  EXPECT_EQ(model.span_reason, "as given");
  EXPECT_NEAR(model.outside_span_v, std::pow(0.5, 4), 1e-12) << "2^-5 + 2^-6 + ...";
  const CursorRow row = victim_row(model, 0, 0);
  ASSERT_EQ(row.values.size(), 6);
  EXPECT_EQ(row.main_index, 1);
  EXPECT_NEAR(row.at(0), 1.0, 1e-12);
  EXPECT_NEAR(row.at(4), 1.0 / 16.0, 1e-12);
  EXPECT_NEAR(victim_row(model, 0, 1).at(0), 0.5, 1e-12);
}

TEST(EyeModel, StopsWhereAMeasuredRecordSinksIntoItsNoise) {
  constexpr double kNoiseV = 1e-3;
  Eigen::VectorXd p = geometric_tail(400, 8, 0.9);
  std::mt19937_64 random(3);
  std::uniform_real_distribution<double> uniform(-std::sqrt(3.0), std::sqrt(3.0));
  for (double& v : p) v += kNoiseV * uniform(random);
  Link link = link_of_pulse(p, 8);
  link.signal.span_ui.reset();
  // Whether the noise was seen before the signal came or has to be found half a record away.
  for (const double seen_v : {0.0, kNoiseV}) {
    link.channel.record_noise_v = seen_v;
    const EyeModel model = prepare(link);
    // 0.9^n falls to the noise at n = 65.6 and to twice the noise at 59; four UI are looked at at
    // once.
    EXPECT_GE(model.span_ui[1], 55);
    EXPECT_LE(model.span_ui[1], 66);
    EXPECT_EQ(model.span_reason,
              "beyond it the record sinks into its own noise of 1 mV RMS per volt launched");
  }
}

TEST(EyeModel, ReachesAsFarAsTheDfe) {
  Link link = link_of_pulse(geometric_tail(60, 1, 0.2), 1);
  link.signal.span_ui.reset();
  link.device.receiver.dfe = {{1, 0.1, false, {}}, {17, 0.1, false, {}}};
  EXPECT_EQ(prepare(link).span_ui[1], 17);
}

TEST(EyeModel, LooksAtEveryPhaseWithEveryMainIndex) {
  for (const int per_ui : {1, 4, 5, 32}) {
    const EyeModel model = prepare(link_of_pulse(geometric_tail(20, per_ui, 0.5), per_ui));
    const auto phases = candidate_phases(model);
    EXPECT_TRUE(std::is_sorted(phases.begin(), phases.end()));
    std::map<Eigen::Index, int> count;
    for (const Eigen::Index phase : phases) ++count[(phase + 10 * per_ui) % per_ui];
    ASSERT_EQ(count.size(), static_cast<std::size_t>(per_ui));
    for (const auto& [phase, times] : count) EXPECT_EQ(times, 3) << phase << " of " << per_ui;
    EXPECT_EQ(std::count(phases.begin(), phases.end(), 0), 1);
  }
}

TEST(EyeModel, WarnsThatASlopeNeedsSamples) {
  Link link = link_of_pulse(geometric_tail(20, 1, 0.5), 1);
  link.jitter.random_ui = 0.01;
  const EyeModel model = prepare(link);
  ASSERT_EQ(model.warnings.size(), 1u);
  EXPECT_EQ(to_string(model.warnings[0]),
            "warning: jitter is left out: found 1 samples per UI, and a slope needs at least 4");
}

}  // namespace
}  // namespace tapwright
