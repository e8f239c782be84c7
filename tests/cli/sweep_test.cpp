// The sweep command: reruns, parts, kills, outputs.

#include <gtest/gtest.h>
#include <sys/resource.h>

#include <algorithm>
#include <nlohmann/json.hpp>
#include <random>
#include <sstream>

#include "cli/run.hpp"
#include "support/process.hpp"

#if defined(__SANITIZE_ADDRESS__) || defined(__SANITIZE_THREAD__)
#define TAPWRIGHT_SANITIZED 1
#elif defined(__has_feature)
#if __has_feature(address_sanitizer) || __has_feature(thread_sanitizer)
#define TAPWRIGHT_SANITIZED 1
#endif
#endif

namespace tapwright::test {
namespace {

const char* const kLink = R"({
  "format": "tapwright.link/1",
  "signal": {"symbol_rate_gbd": 1, "span_ui": [2, 4]},
  "channel": {"pulse": {"samples_v": [0.05, 1.0, 0.3, 0.1], "samples_per_ui": 1}},
  "transmitter": {"swing_mvppd": [600, 1000],
    "fir": [{"position": -1, "min": -0.2, "max": 0, "step": 0.05},
            {"position": 0, "rule": "remainder"},
            {"position": 1, "min": -0.5, "max": 0, "step": 0.05}]},
  "receiver": {"dfe": [{"max_mv": 40, "step_mv": 5}], "noise": {"rms_mv": 1}},
  "target": {"eye_height_mv": 300}
})";

class SweepCommand : public testing::Test {
 protected:
  SweepCommand() { write_file(folder_ / "link.json", kLink); }

  /// A study of `posts` places of a post-cursor and three of noise.
  std::string study(int posts) {
    const std::string path = folder_ / ("study_" + std::to_string(posts) + ".json");
    write_file(path, R"({"format": "tapwright.study/1", "name": "test", "link": "link.json", "axes": [
      {"name": "post", "key": "channel.pulse.samples_v[2]", "from": 0, "to": )" +
                         nlohmann::json(0.5 * (posts - 1) / posts).dump() + R"(, "step": )" +
                         nlohmann::json(0.5 / posts).dump() + R"(},
      {"name": "noise", "corners": [{"name": "quiet, \"cold\"", "changes": {"receiver.noise.rms_mv": 0.5}},
        {"name": "typical"}, {"name": "loud", "changes": {"receiver.noise.rms_mv": 2}}]}]})");
    return path;
  }

  struct Outcome {
    cli::ExitCode code;
    std::string out;
    std::string err;
  };
  static Outcome outcome_of(const std::vector<std::string>& args, std::stop_token stop = {}) {
    std::ostringstream out;
    std::ostringstream err;
    const cli::ExitCode code = cli::run(args, out, err, std::move(stop));
    return {code, out.str(), err.str()};
  }

  ScratchFolder folder_;
};

TEST_F(SweepCommand, TellsWhereToSwitchAndTheOneSetting) {
  const Outcome done = outcome_of({"sweep", study(8), "--threads", "2"});
  EXPECT_EQ(done.err, "");
  for (const char* part : {"24 points", "Where to switch, along post", "One setting for all", "Yield",
                           "Tightest points", "Best codes of each point"}) {
    EXPECT_NE(done.out.find(part), std::string::npos) << part << "\n" << done.out;
  }
}

TEST_F(SweepCommand, TheExitCodeTellsWhetherEveryPointMeetsItsTarget) {
  const std::string path = study(4);
  EXPECT_EQ(outcome_of({"sweep", path}).code, cli::ExitCode::kOk);
  std::string text = contents(folder_ / "link.json");
  text.replace(text.find("\"eye_height_mv\": 300"), 20, "\"eye_height_mv\": 700");
  write_file(folder_ / "link.json", text);
  EXPECT_EQ(outcome_of({"sweep", path}).code, cli::ExitCode::kTargetMissed);
}

TEST_F(SweepCommand, JsonAndCsvHoldEveryPoint) {
  ASSERT_EQ(outcome_of({"sweep", study(8), "--json", folder_ / "a.json", "--csv", folder_ / "a.csv"}).code,
            cli::ExitCode::kOk);
  const auto json = nlohmann::json::parse(contents(folder_ / "a.json"));
  EXPECT_EQ(json.at("format"), "tapwright.sweep/1");
  EXPECT_EQ(json.at("points").size(), 24u);
  EXPECT_EQ(json.at("done"), 24);
  for (std::size_t i = 0; i < 24; ++i) EXPECT_EQ(json["points"][i].at("point"), i);
  // The least margin of the summary is that of the points.
  double least = 1e9;
  for (const auto& p : json["points"]) {
    least = std::min(least, p.at("eye_mv").get<double>() - p.at("target_mv").get<double>());
  }
  EXPECT_EQ(json.at("least_margin_mv"), least);
  std::istringstream csv(contents(folder_ / "a.csv"));
  std::string line;
  std::getline(csv, line);
  EXPECT_EQ(line.substr(0, line.find(",eye_mv")),
            "point,post,noise,swing_mvppd,swing_code,fir:-1,fir:-1_code,fir:0,fir:0_code,fir:1,"
            "fir:1_code,ctle_code,dfe:1_mv,dfe:1_code,phase_ui");
  std::getline(csv, line);
  EXPECT_EQ(line.substr(0, line.find("cold")), "0,0,\"quiet, \"\"");  // quoted as RFC 4180 has it
  int rows = 1;
  while (std::getline(csv, line)) ++rows;
  EXPECT_EQ(rows, 24);
}

TEST_F(SweepCommand, PartsMergeToTheUndividedRun) {
  const std::string path = study(20);
  ASSERT_EQ(outcome_of({"sweep", path, "--state", folder_ / "whole", "--csv", folder_ / "whole.csv"}).code,
            cli::ExitCode::kOk);
  std::vector<std::string> merge = {"sweep", path, "--csv", folder_ / "merged.csv", "--state",
                                    folder_ / "merged"};
  for (int i = 1; i <= 4; ++i) {
    const std::string state = folder_ / ("part" + std::to_string(i));
    ASSERT_EQ(outcome_of({"sweep", path, "--part", std::to_string(i) + "/4", "--state", state,
                          "--threads", std::to_string(i)}).code,
              cli::ExitCode::kOk);
    merge.insert(merge.end(), {"--merge", state});
  }
  std::rotate(merge.end() - 4, merge.end() - 2, merge.end());  // whatever the order
  const Outcome merged = outcome_of(merge);
  EXPECT_EQ(merged.code, cli::ExitCode::kOk) << merged.err;
  EXPECT_EQ(contents(folder_ / "merged.csv"), contents(folder_ / "whole.csv"));
  EXPECT_EQ(contents(folder_ / "merged"), contents(folder_ / "whole"));
  EXPECT_EQ(merged.out, outcome_of({"sweep", path}).out);
}

TEST_F(SweepCommand, AMergeWithoutAPartOrWithOneTwiceIsRefused) {
  const std::string path = study(4);
  const std::string one = folder_ / "one";
  ASSERT_EQ(outcome_of({"sweep", path, "--part", "1/2", "--state", one}).code, cli::ExitCode::kOk);
  const Outcome alone = outcome_of({"sweep", path, "--merge", one});
  EXPECT_EQ(alone.code, cli::ExitCode::kBadInput);
  EXPECT_EQ(alone.err, one + ":1: error: holds part 1/2, wanted 1/1\n");
  const Outcome twice = outcome_of({"sweep", path, "--merge", one, "--merge", one});
  EXPECT_EQ(twice.code, cli::ExitCode::kBadInput);
  EXPECT_EQ(twice.err, one + ":1: error: is the same part as " + one + "\n");
}

TEST_F(SweepCommand, StateOfAnotherStudyIsRefusedAndKept) {
  const std::string state = folder_ / "state";
  ASSERT_EQ(outcome_of({"sweep", study(4), "--state", state}).code, cli::ExitCode::kOk);
  const std::string before = contents(state);
  const Outcome other = outcome_of({"sweep", study(5), "--state", state});
  EXPECT_EQ(other.code, cli::ExitCode::kBadInput);
  EXPECT_EQ(other.err.find(state + ":1: error: holds records of another study"), 0u) << other.err;
  EXPECT_EQ(contents(state), before);
  write_file(state, "my thesis\n");
  const Outcome foreign = outcome_of({"sweep", study(4), "--state", state});
  EXPECT_EQ(foreign.code, cli::ExitCode::kBadInput);
  EXPECT_EQ(foreign.err, state + ":1: error: is no first line of a file of sweep records\n");
  EXPECT_EQ(contents(state), "my thesis\n");
}

TEST_F(SweepCommand, ATornLastRecordIsDoneAgain) {
  const std::string path = study(10);
  const std::string state = folder_ / "state";
  ASSERT_EQ(outcome_of({"sweep", path, "--state", state}).code, cli::ExitCode::kOk);
  const std::string whole = contents(state);
  for (const std::size_t cut : {std::size_t{1}, std::size_t{17}, whole.size() / 2}) {
    write_file(state, whole.substr(0, whole.size() - cut));
    ASSERT_EQ(outcome_of({"sweep", path, "--state", state}).code, cli::ExitCode::kOk);
    EXPECT_EQ(contents(state), whole) << cut;
  }
}

TEST_F(SweepCommand, KilledAtRandomAndRerunGivesTheSameBytes) {
  const std::string path = study(400);
  const std::vector<std::string> plain = {"sweep", path, "--threads", "2", "--csv", "out.csv",
                                          "--json", "out.json", "--state", "state"};
  Conditions calm;
  ScratchFolder undisturbed;
  calm.folder = undisturbed.path();
  const auto start = std::chrono::steady_clock::now();
  const Finished first = run_process(plain, calm);
  const double whole_s =
      std::chrono::duration<double>(std::chrono::steady_clock::now() - start).count();
  ASSERT_EQ(first.code, 0) << first.err;
  std::mt19937_64 random(6);
  for (int round = 0; round < 20; ++round) {
    ScratchFolder here;
    Conditions rough;
    rough.folder = here.path();
    rough.signal = round % 2 == 0 ? SIGKILL : SIGINT;
    rough.signal_after_s = whole_s * static_cast<double>(random() >> 11) * 0x1p-53;
    run_process(plain, rough);
    calm.folder = here.path();
    const Finished rerun = run_process(plain, calm);
    ASSERT_EQ(rerun.code, 0) << rerun.err;
    EXPECT_EQ(rerun.out, first.out);
    for (const char* name : {"out.csv", "out.json", "state"}) {
      EXPECT_EQ(contents(here / name), contents(undisturbed / name)) << round << " " << name;
    }
  }
}

TEST_F(SweepCommand, StoppedWithoutStateStillTellsWhatIsDone) {
  std::stop_source stop;
  stop.request_stop();
  const Outcome stopped = outcome_of({"sweep", study(4)}, stop.get_token());
  EXPECT_EQ(stopped.code, cli::ExitCode::kStopped);
  EXPECT_EQ(stopped.err, "tapwright sweep: error: stopped before the first point; nothing was written\n");
}

TEST_F(SweepCommand, MemoryDoesNotGrowWithTheNumberOfPoints) {
#ifdef TAPWRIGHT_SANITIZED
  GTEST_SKIP() << "sanitizers keep freed memory";
#endif
  const auto peak_kib = [&](int posts) {
    const Finished done = run_process({"sweep", study(posts), "--csv", folder_ / "m.csv", "--json",
                                       folder_ / "m.json", "--state", folder_ / std::to_string(posts),
                                       "--quiet"});
    EXPECT_EQ(done.code, 0) << done.err;
    rusage usage{};
    getrusage(RUSAGE_CHILDREN, &usage);  // the largest of all children so far
    return usage.ru_maxrss;
  };
  const long few = peak_kib(400);
  const long many = peak_kib(2000);
  // 4800 more points; kept in memory, a record alone takes over 500 bytes, 2.4 MiB in all. The
  // allocator's own rounding stays under 1 MiB.
  EXPECT_LT(many - few, 1024);
}

TEST_F(SweepCommand, BadOptionsAreTold) {
  const std::string path = study(4);
  for (const char* part : {"0/2", "3/2", "2", "a/b", "1/0"}) {
    const Outcome bad = outcome_of({"sweep", path, "--part", part});
    EXPECT_EQ(bad.code, cli::ExitCode::kBadInput);
    EXPECT_EQ(bad.err, "tapwright sweep: error: --part: found \"" + std::string(part) +
                           "\", wanted I/N with I from 1 to N, such as 2/8\n");
  }
  EXPECT_EQ(outcome_of({"sweep"}).code, cli::ExitCode::kBadInput);
}

}  // namespace
}  // namespace tapwright::test
