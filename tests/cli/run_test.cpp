#include "cli/run.hpp"

#include <gtest/gtest.h>

#include <unistd.h>

#include <algorithm>
#include <filesystem>
#include <fstream>
#include <nlohmann/json.hpp>
#include <sstream>

#include "cli/command.hpp"

namespace tapwright::cli {
namespace {

struct Outcome {
  ExitCode code;
  std::string out;
  std::string err;
};

Outcome outcome_of(const std::vector<std::string>& args, std::stop_token stop = {}) {
  std::ostringstream out;
  std::ostringstream err;
  const ExitCode code = run(args, out, err, std::move(stop));
  return {code, out.str(), err.str()};
}

// One UI-spaced pulse, a post-cursor tap: solvable by hand.
constexpr const char* kTwoTaps = R"({
  "format": "tapwright.link/1", "name": "by hand",
  "signal": {"symbol_rate_gbd": 1},
  "channel": {"pulse": {"samples_v": [0.8, 0.4], "samples_per_ui": 1}},
  "transmitter": {"swing_mvppd": 2000, "fir": [
    {"position": 0, "rule": "remainder"}, {"position": 1, "min": -0.5, "max": 0, "step": 0.125}]},
  "target": {"eye_height_mv": 100}})";

class Cli : public ::testing::Test {
 protected:
  void SetUp() override {
    folder_ = std::filesystem::path(::testing::TempDir()) /
              ("tapwright_cli_" + std::to_string(::getpid()));
    std::filesystem::create_directories(folder_);
    std::ofstream(path("link.json")) << kTwoTaps;
  }
  void TearDown() override { std::filesystem::remove_all(folder_); }
  [[nodiscard]] std::string path(const std::string& name) const { return (folder_ / name).string(); }
  std::filesystem::path folder_;
};

TEST_F(Cli, SolvesALinkThatIsSolvedByHand) {
  // c = (1 - x, -x): q = 0.8 (1 - x), 0.4 (1 - x) - 0.8 x, -0.4 x. E/2 = q0 - |q1| - |q2| is
  //   x <= 1/3: 0.8 - 0.8x - 0.4 + 1.2x - 0.4x = 0.4 (flat); beyond: 0.8 - 0.8x - 1.2x + 0.4 - 0.4x.
  // So 800 mV at most; of the codes 0, 1/8, 1/4 the order of ties decides.
  const Outcome o = outcome_of({"solve", path("link.json"), "--json", "-"});
  ASSERT_EQ(o.code, ExitCode::kOk) << o.err;
  const auto answer = nlohmann::json::parse(o.out);
  EXPECT_EQ(answer["format"], "tapwright.solution/1");
  EXPECT_EQ(answer["proof"]["kind"], "proven");
  EXPECT_NEAR(answer["score"]["eye_height_worst_case_mv"].get<double>(), 800.0, 1e-9);
  EXPECT_NEAR(answer["proof"]["bound_mv"].get<double>(), 800.0, 1e-9);
  EXPECT_NEAR(answer["settings"]["tx_fir"][0]["value"].get<double>() -
                  answer["settings"]["tx_fir"][1]["value"].get<double>(),
              1.0, 1e-12);
}

TEST_F(Cli, ScoresWhatSolveWrote) {
  ASSERT_EQ(outcome_of({"solve", path("link.json"), "--json", path("answer.json")}).code, ExitCode::kOk);
  const Outcome o =
      outcome_of({"score", path("link.json"), "--settings", path("answer.json"), "--json", "-"});
  ASSERT_EQ(o.code, ExitCode::kOk) << o.err;
  const auto written = nlohmann::json::parse(std::ifstream(path("answer.json")));
  const auto scored = nlohmann::json::parse(o.out);
  EXPECT_EQ(scored["score"], written["score"]);
  EXPECT_EQ(scored["settings"], written["settings"]);
}

TEST_F(Cli, ExitsWithOneWhenTheTargetIsMissed) {
  const Outcome o = outcome_of({"solve", path("link.json"), "--set", "target.eye_height_mv=900"});
  EXPECT_EQ(o.code, ExitCode::kTargetMissed);
  EXPECT_NE(o.out.find("Target missed:"), std::string::npos);
}

TEST_F(Cli, RefusesEverySlipInOneLineAndWithTwo) {
  const struct {
    std::vector<std::string> args;
    std::string want;
  } cases[] = {
      {{"sovle"}, "tapwright: error: no command \"sovle\"; did you mean solve?"},
      {{"solve", "--jsn", "x"}, "tapwright solve: error: no option --jsn; did you mean --json?"},
      {{"solve", path("no.json")}, path("no.json") + ": error: "},
      {{"solve", path("link.json"), "--threads", "x"},
       "--threads: found \"x\", wanted a whole number from 1 to 256"},
      {{"solve", path("link.json"), "--set", "nothing"}, "--set: found \"nothing\", wanted KEY=VALUE"},
      {{"solve", path("link.json"), "--json", path("no/such.json")}, "there is no directory"},
      {{"score", path("link.json"), "--fir", "1:-0.1"}, "outside the transmitter's limits"},
      {{"score", path("link.json"), "--fir", "7:-0.125"}, "no tap at 7"},
      {{"score", path("link.json"), "--swing", "900"}, "swing_mvppd: found 900, wanted one of 2000"},
      {{"score", path("link.json"), "--phase", "9"}, "--phase: found \"9\", wanted a number from -2 to 2"},
  };
  for (const auto& c : cases) {
    const Outcome o = outcome_of(c.args);
    EXPECT_EQ(o.code, ExitCode::kBadInput) << c.want;
    EXPECT_NE(o.err.find(c.want), std::string::npos) << c.want << "\nbut: " << o.err;
    EXPECT_EQ(std::count(o.err.begin(), o.err.end(), '\n'), 1) << o.err;
    EXPECT_TRUE(o.out.empty()) << o.out;
  }
}

TEST_F(Cli, WritesNothingWhenTheInputIsBad) {
  std::ofstream(path("bad.json")) << R"({"format": "tapwright.link/1", "nonsense": 1})";
  EXPECT_EQ(outcome_of({"solve", path("bad.json"), "--json", path("out.json")}).code, ExitCode::kBadInput);
  EXPECT_FALSE(std::filesystem::exists(path("out.json")));
}

TEST_F(Cli, StopsWithoutWritingWhenAsked) {
  std::stop_source source;
  source.request_stop();
  const Outcome o = outcome_of({"solve", path("link.json"), "--json", path("out.json")}, source.get_token());
  EXPECT_EQ(o.code, ExitCode::kStopped);
  EXPECT_FALSE(std::filesystem::exists(path("out.json")));
}

TEST_F(Cli, AnswersTheSameBytesForAnyNumberOfThreads) {
  const Outcome one = outcome_of({"solve", path("link.json"), "--json", "-", "--threads", "1"});
  const Outcome four = outcome_of({"solve", path("link.json"), "--json", "-", "--threads", "4"});
  EXPECT_EQ(one.out, four.out);
}

TEST_F(Cli, ExampleSolvesAsItIs) {
  const Outcome example = outcome_of({"example"});
  ASSERT_EQ(example.code, ExitCode::kOk);
  std::ofstream(path("example.json")) << example.out;
  const Outcome o = outcome_of({"solve", path("example.json"), "--quiet"});
  EXPECT_EQ(o.code, ExitCode::kOk) << o.err;
  EXPECT_EQ(o.out.find("nan"), std::string::npos);
  // With no file, the same link is solved.
  const Outcome built_in = outcome_of({"solve", "--quiet", "--json", "-"});
  const Outcome from_file = outcome_of({"solve", path("example.json"), "--quiet", "--json", "-"});
  EXPECT_EQ(nlohmann::json::parse(built_in.out)["settings"], nlohmann::json::parse(from_file.out)["settings"]);
}

TEST_F(Cli, SchemaIsJson) {
  const auto schema = nlohmann::json::parse(outcome_of({"schema"}).out);
  EXPECT_TRUE(schema.contains("$schema"));
}

TEST_F(Cli, EveryOptionStandsInHelpManualAndCompletions) {
  const std::string manual = outcome_of({"--manual"}).out;
  const std::string completions = outcome_of({"--completions"}).out;
  std::string plain = manual;
  for (std::size_t at = 0; (at = plain.find("\\-", at)) != std::string::npos;) plain.erase(at, 1);
  for (const Command& command : commands()) {
    const std::string help = outcome_of({command.name, "--help"}).out;
    EXPECT_NE(outcome_of({"--help"}).out.find(command.summary), std::string::npos);
    for (const OptionRow& row : command.rows) {
      EXPECT_NE(help.find(row.name), std::string::npos) << command.name << ' ' << row.name;
      EXPECT_NE(plain.find(row.name), std::string::npos) << command.name << ' ' << row.name;
      if (row.name.starts_with("--")) {
        EXPECT_NE(completions.find(row.name), std::string::npos) << row.name;
      }
    }
  }
}

TEST_F(Cli, PulseAgreesWithTheFile) {
  const Outcome o = outcome_of({"pulse", path("link.json"), "--csv", "-"});
  ASSERT_EQ(o.code, ExitCode::kOk) << o.err;
  EXPECT_EQ(o.out.substr(0, o.out.find('\n')), "time_ps,unequalised_mv,equalised_mv");
  EXPECT_NE(o.out.find(",800,800\n"), std::string::npos) << o.out;
}

TEST_F(Cli, PulseTellsTheQualityOfATouchstoneFile) {
  // A matched two-port with a delay of 1 ns, and one point with a gain of 1.1 from 2 to 1.
  std::ofstream file(path("gain.s2p"));
  file << "# MHZ S MA R 50\n";
  for (int k = 0; k <= 200; ++k) {
    const double turn = -360.0 * 0.05 * k;
    file << 50 * k << " 0 0 0.8 " << turn << (k == 100 ? " 1.1 " : " 0.8 ") << turn << " 0 0\n";
  }
  file.close();
  std::ofstream(path("file.json")) << R"({
    "format": "tapwright.link/1", "signal": {"symbol_rate_gbd": 5},
    "channel": {"touchstone": {"file": "gain.s2p"}}})";
  const Outcome plain = outcome_of({"pulse", path("file.json")});
  ASSERT_EQ(plain.code, ExitCode::kOk) << plain.err;
  EXPECT_NE(plain.out.find("gain.s2p, from port 1 to 2\n"), std::string::npos) << plain.out;
  EXPECT_NE(plain.out.find("largest gain 1.1000 at 5 GHz"), std::string::npos) << plain.out;

  const auto json = nlohmann::json::parse(outcome_of({"pulse", path("file.json"), "--json", "-"}).out);
  ASSERT_EQ(json["files"].size(), 1U);
  // By hand: (1.1 - 1.00001)/0.1 of one point in 201.
  EXPECT_NEAR(json["files"][0]["passivity_percent"].get<double>(), 100.0 - 99.99 / 201.0, 1e-9);
  EXPECT_NEAR(json["files"][0]["delay_ps"].get<double>(), 1000.0, 1e-6);

  // Repaired on request, and said so; the quality remains that of the file.
  std::ofstream(path("repaired.json")) << R"({
    "format": "tapwright.link/1", "signal": {"symbol_rate_gbd": 5},
    "channel": {"touchstone": {"file": "gain.s2p", "repair": "nearest_passive"}}})";
  const Outcome repaired = outcome_of({"pulse", path("repaired.json"), "--json", "-"});
  ASSERT_EQ(repaired.code, ExitCode::kOk) << repaired.err;
  EXPECT_EQ(nlohmann::json::parse(repaired.out)["files"], json["files"]);
  const std::string all = repaired.err + outcome_of({"pulse", path("repaired.json")}).out;
  std::string words;
  for (const char c : all) {
    if (c == '\n') words += ' ';
    if (c != '\n' && !(c == ' ' && words.ends_with(' '))) words += c;
  }
  EXPECT_NE(words.find("as asked, 1 of 201 points were made passive, by at most 0.1"),
            std::string::npos)
      << all;
}

}  // namespace
}  // namespace tapwright::cli
