#include "tapwright/link/read_back.hpp"

#include <gtest/gtest.h>

#include "support/input_files.hpp"
#include "tapwright/link/read_link.hpp"

namespace tapwright {
namespace {

Link sample() {
  auto link = read_link(TAPWRIGHT_SOURCE_DIR "/channels/camera_3m.json");
  if (!link) throw std::runtime_error(to_string(link.notes.front()));
  return *link.value;
}

class BadReadBack : public testing::TestWithParam<std::string> {};

TEST_P(BadReadBack, IsRefusedWithItsNotes) {
  static const Link link = sample();
  const std::string folder = TAPWRIGHT_SOURCE_DIR "/tests/bad/readback/";
  const auto lanes = parse_read_back(test::bytes_of(folder + GetParam()), GetParam(), link);
  std::string notes;
  for (const Diagnostic& note : lanes.notes) notes += to_string(note) + "\n";
  EXPECT_EQ(notes, test::bytes_of(folder + GetParam() + ".expect"));
  EXPECT_FALSE(lanes);
}

INSTANTIATE_TEST_SUITE_P(Files, BadReadBack, testing::ValuesIn(test::files_with_expectation("tests/bad/readback")),
                         [](const auto& file) { return test::test_name_of(file.param); });

TEST(ReadBack, CodesRegistersAndJsonSayTheSame) {
  const Link link = sample();
  const auto codes = parse_read_back(
      "lane,swing,fir:-1,fir:1,ctle,dfe:1,dfe:2,dfe:3,dfe:4\nA,6,-5,-24,0,-2,-1,1,1\n", "a.csv", link);
  const auto fields = parse_read_back(
      "# read at 25 degrees\nlane;TX_SWING;TX_PRE;TX_POST;RX_CTLE;RX_DFE1;RX_DFE2;RX_DFE3;RX_DFE4\n"
      "A;0x6;0x5;0x18;0;0x3E;0x1F;1;1\n", "b.csv", link);
  const auto json = parse_read_back(
      R"([{"lane": "A", "swing": 6, "fir:-1": -5, "fir:1": -24, "ctle": 0, "dfe:1": -2, "dfe:2": -1, "dfe:3": 1, "dfe:4": 1}])",
      "c.json", link);
  ASSERT_TRUE(codes && fields && json);
  EXPECT_EQ(codes.value->front().knobs, fields.value->front().knobs);
  EXPECT_EQ(codes.value->front().knobs, json.value->front().knobs);
  const auto s = settings_of(codes.value->front(), link, "a.csv");
  ASSERT_TRUE(s);
  EXPECT_EQ(s.value->swing_index, 6u);
  EXPECT_NEAR((*s.value->fir)[2], -0.3, 1e-12);
  EXPECT_NEAR((*s.value->fir)[1], 1.0 - 0.0625 - 0.3, 1e-12);  // the remainder
  EXPECT_NEAR((*s.value->dfe_v)[0], -0.004, 1e-12);
}

TEST(ReadBack, LeavesMissingColumnsOpen) {
  const Link link = sample();
  const auto lanes = parse_read_back("lane,ctle,eye_height_mv\nA,3,\nB,,52.5\n", "a.csv", link);
  ASSERT_TRUE(lanes);
  const auto a = settings_of((*lanes.value)[0], link, "a.csv");
  ASSERT_TRUE(a);
  EXPECT_FALSE(a.value->swing_index || a.value->fir || a.value->dfe_v || a.value->phase_samples);
  EXPECT_EQ(a.value->ctle_index, 3u);
  EXPECT_FALSE((*lanes.value)[0].eye_height_v);
  EXPECT_DOUBLE_EQ(*(*lanes.value)[1].eye_height_v, 0.0525);
}

}  // namespace
}  // namespace tapwright
