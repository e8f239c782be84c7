// The HTML report in a real browser, and the SVG figures as XML.

#include <gtest/gtest.h>
#include <unistd.h>

#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <random>

#include "report/escape.hpp"
#include "support/python.hpp"
#include "tapwright/eye/sampling.hpp"
#include "tapwright/link/read_link.hpp"
#include "tapwright/report/html_report.hpp"
#include "tapwright/search/solve.hpp"

namespace tapwright {
namespace {

namespace fs = std::filesystem;

bool has_browser() {
  static const bool found =
      std::system("command -v chromedriver > /dev/null && command -v chromium > /dev/null") == 0;  // NOLINT
  return found;
}

class Pages : public ::testing::Test {
 protected:
  void SetUp() override {
    folder_ = fs::path(::testing::TempDir()) / ("tapwright_page_" + std::to_string(::getpid()));
    fs::create_directories(folder_);
  }
  void TearDown() override { fs::remove_all(folder_); }
  fs::path folder_;
};

SolutionReport solved(const EyeModel& model) {
  SearchOptions options;
  options.compare = true;
  return report_on(model, solve(model, options));
}

TEST_F(Pages, OpenFromDiskWithEveryChartAndTheProgramsOwnNumbers) {
  if (!has_browser()) GTEST_SKIP() << "no chromium with chromedriver";
  const auto link = read_link(TAPWRIGHT_SOURCE_DIR "/channels/camera_3m.json");
  ASSERT_TRUE(link);
  const EyeModel model = prepare(*link.value);
  const SolutionReport report = solved(model);
  const std::string html = html_of(report);
  EXPECT_LT(html.size(), 2'000'000u);
  std::ofstream(folder_ / "page.html") << html;

  // Settings around the answer: the page must agree with the program to 0.1 mV.
  const Device& device = model.link.device;
  std::mt19937_64 random(5);
  nlohmann::json settings = nlohmann::json::array();
  std::vector<double> want_v;
  for (int i = 0; i < 12; ++i) {
    Settings s = report.solution.settings;
    for (const Knob& knob : knobs_of(device)) {
      if (knob.kind == Knob::Kind::kCtle || knob.kind == Knob::Kind::kSwing) continue;
      const int steps = static_cast<int>(random() % 7) - 3;
      if (const auto there = moved(device, s, knob, steps, 0.1)) s = *there;
    }
    s.phase_samples += static_cast<Eigen::Index>(random() % 9) - 4;
    nlohmann::json object;
    object["swing"] = s.swing_index;
    object["phase"] = s.phase_samples;
    object["fir"] = std::vector<double>(s.fir.begin(), s.fir.end());
    object["dfe_v"] = std::vector<double>(s.dfe_v.begin(), s.dfe_v.end());
    object["dfe_on"] = true;
    object["state"] = nullptr;  // set below from the page's own list
    settings.push_back(object);
    want_v.push_back(score(model, s).height.worst_case_v);
  }
  // The page's list of CTLE states begins at the lowest that it holds; the answer's own entry is
  // found in the page's data.
  const std::string mark = "\"answer\":{\"swing\":";
  const std::size_t at = html.find("\"state\":", html.find(mark));
  ASSERT_NE(at, std::string::npos);
  const int state = std::atoi(html.c_str() + at + 8);
  for (auto& s : settings) s["state"] = state;
  std::ofstream(folder_ / "trial.json") << settings.dump();

  const auto found = test::run_python("tests/outside/page_check.py",
                                      "'" + (folder_ / "page.html").string() + "' --trial '" +
                                          (folder_ / "trial.json").string() + "'");
  ASSERT_TRUE(found);
  EXPECT_EQ((*found)["console"], nlohmann::json::array()) << (*found)["console"];
  EXPECT_EQ((*found)["requests"], nlohmann::json::array()) << (*found)["requests"];
  EXPECT_EQ((*found)["unlabelled"], nlohmann::json::array());
  EXPECT_EQ((*found)["charts"].size(), figures_of(report).size());
  for (const auto& chart : (*found)["charts"]) {
    EXPECT_GT(chart[1].get<int>(), 0) << chart[0];
    EXPECT_GT(chart[2].get<int>(), 1000) << chart[0];  // painted pixels
  }
  // Web Content Accessibility Guidelines 2.1, success criterion 1.4.3: 4.5:1 for text.
  EXPECT_GE((*found)["contrast_light"][0].get<double>(), 4.5) << (*found)["contrast_light"];
  EXPECT_GE((*found)["contrast_dark"][0].get<double>(), 4.5) << (*found)["contrast_dark"];
  for (const char* view : {"desktop-light", "phone-light", "desktop-dark", "phone-dark"}) {
    EXPECT_LE((*found)[std::string("overflow_") + view].get<int>(), 0) << view;
  }
  EXPECT_EQ((*found)["pdf_head"], "%PDF-");
  for (std::size_t i = 0; i < want_v.size(); ++i) {
    EXPECT_NEAR((*found)["trial_heights_v"][i].get<double>(), want_v[i], 1e-4) << i;
  }
  EXPECT_NEAR((*found)["answer_height_v"].get<double>(), report.solution.score.height.worst_case_v, 1e-4);
  EXPECT_NE((*found)["moved"][0], (*found)["moved"][1]);
  EXPECT_EQ((*found)["moved"][0], (*found)["moved"][2]);
}

TEST_F(Pages, ShowHostileNamesAsText) {
  const std::string hostile = "</script><script>window.injected=1</script>\"'<b>&amp; \xD7\xA9\xD7\x9C\xE2\x80\xAE " +
                              std::string(10000, 'x');
  auto link = parse_link(example_link(), "example", "");
  ASSERT_TRUE(link);
  link.value->name = hostile;
  for (Aggressor& a : link.value->crosstalk) a.name = hostile;
  const EyeModel model = prepare(*link.value);
  const SolutionReport report = solved(model);
  const std::string html = html_of(report);
  EXPECT_EQ(html.find("<script>window.injected"), std::string::npos);
  std::ofstream(folder_ / "hostile.html") << html;
  if (!has_browser()) GTEST_SKIP() << "no chromium with chromedriver";
  const auto found = test::run_python("tests/outside/page_check.py", "'" + (folder_ / "hostile.html").string() + "'");
  ASSERT_TRUE(found);
  EXPECT_EQ((*found)["injected"], 0);
  EXPECT_EQ((*found)["title"].get<std::string>(), hostile);
  EXPECT_EQ((*found)["console"], nlohmann::json::array());
  EXPECT_LE((*found)["overflow_phone-light"].get<int>(), 0);
}

TEST_F(Pages, FiguresAreWellFormedSvgWithTitleAndUnits) {
  if (!test::has_scipy()) GTEST_SKIP() << "no python";
  auto link = parse_link(example_link(), "example", "");
  ASSERT_TRUE(link);
  const EyeModel model = prepare(*link.value);
  for (const Figure& figure : figures_of(solved(model))) {
    const std::string file = (folder_ / (figure.id + ".svg")).string();
    std::ofstream(file) << svg_of(figure);
    EXPECT_EQ(std::system((TAPWRIGHT_PYTHON " -c \"import sys, xml.dom.minidom as m; d = m.parse(sys.argv[1]); "
                           "assert d.getElementsByTagName('title')[0].firstChild.data; "
                           "assert 'nan' not in open(sys.argv[1]).read()\" '" + file + "'").c_str()), 0)  // NOLINT
        << figure.id;
    EXPECT_NE(figure.x.label.find('('), std::string::npos) << figure.id << " has no unit on its axis";
  }
}

TEST(Escape, KeepsMarkupAndScriptsFromBreakingOut) {
  EXPECT_EQ(markup_escaped("<a href=\"x\">'&\x01\xFF"), "&lt;a href=&quot;x&quot;&gt;&#39;&amp;\xEF\xBF\xBD\xEF\xBF\xBD");
  EXPECT_EQ(script_escaped("\"</script>\xE2\x80\xA8&\""), "\"\\u003c/script\\u003e\\u2028\\u0026\"");
}

TEST(Ticks, AreRoundAndInside) {
  EXPECT_EQ(ticks(0.0, 10.0, 5, false), (std::vector<double>{0, 2, 4, 6, 8, 10}));
  EXPECT_EQ(ticks(-0.25, 0.26, 5, false), (std::vector<double>{-0.2, -0.1, 0, 0.1, 0.2}));
  EXPECT_EQ(ticks(1e-3, 1.0, 5, true), (std::vector<double>{1e-3, 1e-2, 0.1, 1}));
  EXPECT_TRUE(ticks(1.0, 1.0, 5, false).empty());
}

}  // namespace
}  // namespace tapwright
