#include <gtest/gtest.h>

#include <algorithm>
#include <cmath>
#include <filesystem>
#include <nlohmann/json.hpp>
#include <sstream>
#include <vector>

#include "cli/run.hpp"
#include "support/process.hpp"
#include "tapwright/channel/line_fit.hpp"
#include "tapwright/channel/touchstone.hpp"

namespace tapwright::cli {
namespace {

struct Outcome {
  ExitCode code;
  std::string out;
  std::string err;
};

Outcome outcome_of(const std::vector<std::string>& args) {
  std::ostringstream out, err;
  const ExitCode code = run(args, out, err, {});
  return {code, out.str(), err.str()};
}

/// A board of which everything is known: 120 mm between launches.
LineFit known() {
  LineFit made;
  made.model = annex_line(0, 4e-4, 2.5e-4, 6e-3, 47.0);
  made.model.dispersion = Dispersion{0.1, 8e9};
  made.ends = EndSection{55.0, 40e-12};
  return made;
}

const Eigen::VectorXd& grid_hz() {
  static const Eigen::VectorXd f = Eigen::VectorXd::LinSpaced(800, 12.5e6, 10e9);
  return f;
}

TEST(FitCommand, GivesTheLineBackAsAChannelThatALinkTakes) {
  const test::ScratchFolder folder;
  test::write_file(folder / "board.s2p",
                   write_touchstone(predicted_network(known(), 0.12, grid_hz(), 50.0)));
  const Outcome fit =
      outcome_of({"fit", folder / "board.s2p", "--length-m", "0.12", "--top-ghz", "10",
                  "--predict-m", "0.3", "--json", "-", "--touchstone", folder / "longer.s2p"});
  ASSERT_EQ(fit.code, ExitCode::kOk) << fit.err;
  const nlohmann::json answer = nlohmann::json::parse(fit.out);
  EXPECT_EQ(answer["format"], "tapwright.fit/1");
  EXPECT_LT(answer["residual"]["s21"].get<double>(), 1e-6);
  const nlohmann::json line = answer["channel"]["cascade"][1]["line"];
  EXPECT_EQ(line["length_m"], 0.3);
  // Method: the fit stops within 1e-5 of the numbers that made the file. A pair of lines has twice
  // the impedance.
  EXPECT_NEAR(line["a1_sqrt_ns_per_mm"].get<double>() / 4e-4, 1.0, 1e-3);
  EXPECT_NEAR(line["tau_ns_per_mm"].get<double>() / 6e-3, 1.0, 1e-4);
  EXPECT_NEAR(line["impedance_ohm"].get<double>(), 94.0, 0.01);
  EXPECT_NEAR(line["dispersion"]["rise"].get<double>(), 0.1, 1e-3);
  const nlohmann::json end = answer["channel"]["cascade"][0]["lumped"][0]["section"];
  EXPECT_NEAR(end["impedance_ohm"].get<double>(), 110.0, 0.01);
  EXPECT_NEAR(end["delay_ps"].get<double>(), 40.0, 0.01);

  // The prediction's file and the channel make the same pulse.
  std::vector<double> records[2];
  for (int i = 0; i < 2; ++i) {
    const nlohmann::json link = {
        {"format", "tapwright.link/1"},
        {"signal", {{"symbol_rate_gbd", 5}, {"span_ui", {8, 60}}}},
        {"channel", i == 0 ? answer["channel"]
                           : nlohmann::json{{"touchstone", {{"file", folder / "longer.s2p"}}}}},
        {"transmitter",
         {{"swing_mvppd", 1000},
          {"rise_time_ps", 60},
          {"fir", {{{"position", 0}, {"rule", "remainder"}}}}}},
        {"target", {{"eye_height_mv", 10}}}};
    test::write_file(folder / "link.json", link.dump());
    const Outcome pulse = outcome_of({"pulse", folder / "link.json", "--json", "-", "--quiet"});
    ASSERT_EQ(pulse.code, ExitCode::kOk) << pulse.err;
    records[i] = nlohmann::json::parse(pulse.out)["unequalised_mv"].get<std::vector<double>>();
  }
  const auto peak_of = [](const std::vector<double>& r) {
    return std::max_element(r.begin(), r.end()) - r.begin();
  };
  const auto at = [&](int i, std::ptrdiff_t k) {
    return records[i][static_cast<std::size_t>(peak_of(records[i]) + k)];
  };
  for (std::ptrdiff_t k = -32; k < 60 * 32; ++k) {
    // Method: the peak is found to a sample, so the other record lies within a sample to either
    // side; and the file ends at 10 GHz where the model does not: a 60 ps edge leaves e^-2.5 of
    // the little that the sinc passes there.
    const auto [low, high] = std::minmax({at(1, k - 1), at(1, k), at(1, k + 1)});
    EXPECT_GE(at(0, k), low - 0.5) << k;
    EXPECT_LE(at(0, k), high + 0.5) << k;
  }
}

TEST(FitCommand, TellsTheLineInWords) {
  const test::ScratchFolder folder;
  LineFit plain;
  plain.model = annex_line(0, 4e-4, 2.5e-4, 6e-3, 50.0);
  test::write_file(folder / "a.s2p",
                   write_touchstone(predicted_network(plain, 0.1, grid_hz(), 50.0)));
  const Outcome fit = outcome_of({"fit", folder / "a.s2p", "--length-m", "0.1"});
  ASSERT_EQ(fit.code, ExitCode::kOk) << fit.err;
  // By hand: 4e-4 and 2.5e-4 nepers per mm at 1 GHz are 3.4744 and 2.1715 dB/m; the delay is
  // 6 ns/m and 4e-4 / (2 pi) ns/mm of the skin effect's.
  EXPECT_NE(fit.out.find("impedance         50.00 ohm"), std::string::npos) << fit.out;
  EXPECT_NE(fit.out.find("3.4744 dB/m at 1 GHz, as sqrt(f)"), std::string::npos) << fit.out;
  EXPECT_NE(fit.out.find("2.1715 dB/m at 1 GHz, as f"), std::string::npos) << fit.out;
  EXPECT_NE(fit.out.find("6.0637 ns/m at 1 GHz"), std::string::npos) << fit.out;
  EXPECT_NE(fit.out.find("\"channel\": {\"line\":"), std::string::npos) << fit.out;
}

TEST(FitCommand, RefusesWhatItCannotUse) {
  const test::ScratchFolder folder;
  test::write_file(folder / "a.s2p",
                   write_touchstone(predicted_network(known(), 0.1, grid_hz(), 50.0)));
  const struct {
    std::vector<std::string> args;
    std::string want;
  } cases[] = {
      {{"fit", folder / "no.s2p", "--length-m", "1"}, "no.s2p: error: "},
      {{"fit", folder / "a.s2p", "--length-m", "0"}, "--length-m: found \"0\", wanted a number"},
      {{"fit", folder / "a.s2p", "--length-m", "1", "--in", "1"}, "--in and --out go together"},
      {{"fit", folder / "a.s2p", "--length-m", "1", "--in", "x", "--out", "2"},
       "--in: found \"x\", wanted one port or two, such as 1,3"},
      {{"fit", folder / "a.s2p", "--length-m", "1", "--in", "1", "--out", "3"}, "a.s2p: error: "},
      {{"fit", folder / "a.s2p", "--length-m", "1", "--top-ghz", "0.1"},
       "found 8 points up to 0.1 GHz; wanted at least 16"},
      {{"fit", folder / "a.s2p"}, "--length-m"},
      {{"fit"}, "FILE"},
  };
  for (const auto& c : cases) {
    const Outcome o = outcome_of(c.args);
    EXPECT_EQ(o.code, ExitCode::kBadInput) << c.want;
    EXPECT_NE(o.err.find(c.want), std::string::npos) << c.want << "\nbut: " << o.err;
    EXPECT_TRUE(o.out.empty()) << o.out;
  }
}

}  // namespace
}  // namespace tapwright::cli
