// Axes, points and changes of study files.

#include "tapwright/study/study_file.hpp"

#include <gtest/gtest.h>

#include <cmath>
#include <set>

#include "support/input_files.hpp"
#include "tapwright/study/normal_draws.hpp"

namespace tapwright {
namespace {

const std::string kFolder = TAPWRIGHT_SOURCE_DIR "/tests/bad/study";

Study study_of(const std::string& axes, const std::string& more = "") {
  const std::string text = R"({"format": "tapwright.study/1", "link": "base.json", "axes": [)" +
                           axes + "]" + more + "}";
  Result<Study> study = parse_study(text, "study.json", kFolder);
  for (const Diagnostic& note : study.notes) ADD_FAILURE() << to_string(note);
  return *study.value;
}

const std::string kNoise = R"({"name": "noise", "key": "receiver.noise.rms_mv", "values": [1, 2]})";
const std::string kRate =
    R"({"name": "rate", "key": "signal.symbol_rate_gbd", "from": 1, "to": 1.3, "step": 0.1})";

TEST(Study, ARangeHoldsDecimalStepsAndItsEnd) {
  const Study study = study_of(kRate);
  ASSERT_EQ(study.axes[0].size(), 4);  // 1, 1.1, 1.2, 1.3: 0.3 / 0.1 is just under 3 in binary
  EXPECT_EQ(study.axes[0].at(3).label, "1.3");
  EXPECT_EQ(study.axes[0].at(1).changes[0].value, "1.1");
  EXPECT_EQ(study.axes[0].unit(), "GBd");  // what the link's schema says of the key
}

TEST(Study, NumbersPointsWithTheSwitchAxisSlowest) {
  const Study study = study_of(kNoise + "," + kRate, R"(, "switch_along": "rate")");
  EXPECT_EQ(study.num_points(), 8);
  EXPECT_EQ(study.points_per_switch_value(), 2);
  // Places come in the file's order of axes: noise, rate.
  EXPECT_EQ(study.places(0), (std::vector<std::int64_t>{0, 0}));
  EXPECT_EQ(study.places(1), (std::vector<std::int64_t>{1, 0}));
  EXPECT_EQ(study.places(2), (std::vector<std::int64_t>{0, 1}));
  for (std::int64_t p = 0; p < study.num_points(); ++p) {
    EXPECT_EQ(study.point_at(study.places(p)), p);
  }
}

TEST(Study, TakesTheFirstAxisOfNumbersForTheSwitchTable) {
  const Study study =
      study_of(R"({"name": "corner", "corners": [{"name": "a"}, {"name": "b"}]},)" + kNoise);
  EXPECT_EQ(study.switch_axis, 1u);
}

TEST(Study, ALaterAxisWinsOverAnEarlierOne) {
  const Study study = study_of(
      kNoise + R"(, {"name": "corner", "corners": [{"name": "loud", "changes":
      {"receiver.noise.rms_mv": 9}}]})");
  const Result<Link> link = read_link(study.link, study.changes({0, 0}));
  ASSERT_TRUE(link);
  EXPECT_DOUBLE_EQ(link.value->device.receiver.noise_rms_v.value(), 9e-3);
}

TEST(Study, MakesOnePlaceOfEachFileInOrderOfName) {
  // The files named here are no channels; as the link's name they only have to be texts.
  const Study study = study_of(R"({"name": "lane", "key": "name", "files": "n*.json"})");
  std::vector<std::string> labels;
  for (std::int64_t i = 0; i < study.axes[0].size(); ++i) labels.push_back(study.axes[0].at(i).label);
  EXPECT_EQ(labels, (std::vector<std::string>{"names_twice.json", "no_axes.json", "not_json.json"}));
  // study file, link, three files
  EXPECT_EQ(study.inputs.size(), 5u);
}

TEST(Study, DrawsAreTheSameWhateverWasDrawnBefore) {
  const Study study = study_of(
      R"({"name": "spread", "draws": 1000, "seed": 7, "spread": {"receiver.noise.rms_mv": 0.1}})");
  const std::string late = study.axes[0].at(999).changes[0].value;
  static_cast<void>(study.axes[0].at(3));
  EXPECT_EQ(study.axes[0].at(999).changes[0].value, late);
  std::set<std::string> all;
  for (std::int64_t i = 0; i < 1000; ++i) {
    const AxisValue value = study.axes[0].at(i);
    const double drawn = std::stod(value.changes[0].value);
    EXPECT_LE(std::abs(drawn - 2.0), 0.3);  // three deviations around the link's 2 mV
    all.insert(value.changes[0].value);
  }
  EXPECT_EQ(all.size(), 1000u);
}

TEST(NormalDraws, HaveTheMomentsOfAStandardNormal) {
  NormalDraws draws(1, 0);
  constexpr int kN = 200000;
  double sum = 0.0;
  double squares = 0.0;
  double fourth = 0.0;
  for (int i = 0; i < kN; ++i) {
    const double z = draws.next();
    sum += z;
    squares += z * z;
    fourth += z * z * z * z;
  }
  // Statistical, 5 sigma: the variances of z, z^2 and z^4 are 1, 2 and 96.
  const double root = std::sqrt(static_cast<double>(kN));
  EXPECT_NEAR(sum / kN, 0.0, 5.0 / root);
  EXPECT_NEAR(squares / kN, 1.0, 5.0 * std::sqrt(2.0) / root);
  EXPECT_NEAR(fourth / kN, 3.0, 5.0 * std::sqrt(96.0) / root);
}

TEST(NormalDraws, StreamsOfOneSeedDoNotRepeatEachOther) {
  std::set<double> first;
  for (std::uint64_t stream = 0; stream < 1000; ++stream) {
    first.insert(NormalDraws(1, stream).next());
  }
  EXPECT_EQ(first.size(), 1000u);
}

}  // namespace
}  // namespace tapwright
