// Output is written whole or not at all, whatever the disk, the permissions, the reader of a pipe or
// the user's patience do.

#include <gtest/gtest.h>
#include <sys/mount.h>

#include <algorithm>
#include <nlohmann/json.hpp>
#include <random>

#include "support/process.hpp"

namespace tapwright::test {
namespace {

const std::string kLink = TAPWRIGHT_SOURCE_DIR "/channels/camera_3m.json";

/// Enough codes to keep a search busy for minutes.
std::string endless_link() {
  nlohmann::json fir = nlohmann::json::array();
  for (int position = -3; position <= 4; ++position) {
    fir.push_back({{"position", position},
                   {"min", position == 0 ? 0.3 : -0.3},
                   {"max", position == 0 ? 1.0 : 0.3},
                   {"step", 0.001}});
  }
  const nlohmann::json line = {{"length_m", 5.0},
                               {"loss_db_per_m", {{1.0, 0.9}, {3.125, 1.75}}},
                               {"delay_ns_per_m", 4.6},
                               {"impedance_ohm", 100}};
  return nlohmann::json{
      {"format", "tapwright.link/1"},
      {"signal", {{"symbol_rate_gbd", 10}}},
      {"channel", {{"line", line}}},
      {"transmitter", {{"fir", fir}}},
      {"receiver",
       {{"bandwidth_ghz", 7.5},
        {"dfe", {{{"max_mv", 50}, {"step_mv", 1}}, {{"max_mv", 50}, {"step_mv", 1}}}},
        {"noise", {{"rms_mv", 1.0}}}}},
      {"objective", "at_error_ratio"}}
      .dump();
}

std::vector<std::string> names_in(const std::filesystem::path& folder) {
  std::vector<std::string> names;
  for (const auto& entry : std::filesystem::directory_iterator(folder)) {
    names.push_back(entry.path().filename());
  }
  std::sort(names.begin(), names.end());
  return names;
}

class Robustness : public testing::Test {
 protected:
  ScratchFolder folder_;

  /// Bad input by exit code, told in one line that names `place`.
  void expect_one_line(const Finished& finished, const std::string& place) {
    EXPECT_EQ(finished.code, 2) << finished.err;
    EXPECT_EQ(std::count(finished.err.begin(), finished.err.end(), '\n'), 1) << finished.err;
    EXPECT_NE(finished.err.find(place), std::string::npos) << finished.err;
  }
};

TEST_F(Robustness, AFullFileSystemLeavesTheOldFile) {
  const std::string path = folder_ / "result.json";
  write_file(path, "old");
  Conditions conditions;
  conditions.largest_file = 100;  // bytes: the write in the middle fails, as on a full disk
  expect_one_line(run_process({"solve", kLink, "--quiet", "--json", path}, conditions), path);
  EXPECT_EQ(contents(path), "old");
  EXPECT_EQ(names_in(folder_.path()), std::vector<std::string>{"result.json"});
}

TEST_F(Robustness, AFullDiskLeavesTheOldFile) {
  const std::string disk = folder_ / "disk";
  std::filesystem::create_directory(disk);
  if (mount("none", disk.c_str(), "tmpfs", 0, "size=8k") != 0) {
    GTEST_SKIP() << "mounting a small file system needs root with that right";
  }
  const std::string path = disk + "/result.json";
  write_file(path, "old");
  const Finished finished = run_process({"solve", kLink, "--quiet", "--json", path});
  const std::string kept = contents(path);
  const std::vector<std::string> names = names_in(disk);
  ASSERT_EQ(umount(disk.c_str()), 0);
  expect_one_line(finished, path);
  EXPECT_EQ(kept, "old");
  EXPECT_EQ(names, std::vector<std::string>{"result.json"});
}

TEST_F(Robustness, AFullDeviceIsTold) {
  expect_one_line(run_process({"solve", kLink, "--quiet", "--json", "/dev/full"}), "/dev/full");
}

TEST_F(Robustness, AFolderWithoutPermissionIsToldBeforeTheWork) {
  const std::string locked = folder_ / "locked";
  std::filesystem::create_directory(locked);
  std::filesystem::permissions(locked, std::filesystem::perms::owner_read);
  write_file(folder_ / "link.json", contents(kLink));
  Conditions conditions;
  conditions.without_privileges = true;
  conditions.folder = folder_.path();
  // The program itself may lie where only its owner may look: a copy stands beside the link.
  conditions.program = folder_ / "tapwright";
  std::filesystem::copy_file(TAPWRIGHT_PROGRAM, conditions.program);
  expect_one_line(run_process({"solve", "link.json", "--quiet", "--json", "locked/result.json"},
                              conditions),
                  "locked/result.json");
}

TEST_F(Robustness, ADirectoryInTheWayIsTold) {
  const std::string path = folder_ / "result.json";
  std::filesystem::create_directory(path);
  expect_one_line(run_process({"solve", kLink, "--quiet", "--json", path}), path);
  EXPECT_TRUE(names_in(path).empty());
}

TEST_F(Robustness, AMissingFolderIsTold) {
  const std::string path = folder_ / "nowhere/result.json";
  expect_one_line(run_process({"solve", kLink, "--quiet", "--json", path}), path);
}

TEST_F(Robustness, AClosedPipeIsTold) {
  Conditions conditions;
  conditions.closed_output = true;
  expect_one_line(run_process({"solve", kLink, "--quiet"}, conditions), "standard output");
  expect_one_line(run_process({"schema"}, conditions), "standard output");
  expect_one_line(run_process({"solve", kLink, "--quiet", "--json", "-"}, conditions),
                  "standard output");
}

TEST_F(Robustness, CtrlCIsAnsweredWithinASecond) {
  const std::string link = folder_ / "link.json";
  write_file(link, endless_link());
  Conditions conditions;
  conditions.signal_after_s = 0.7;
  const Finished finished =
      run_process({"solve", link, "--quiet", "--json", folder_ / "result.json"}, conditions);
  EXPECT_EQ(finished.signal, 0);
  EXPECT_EQ(finished.code, 130) << finished.err;
  EXPECT_LT(finished.seconds_after_signal, 1.0);
  EXPECT_EQ(names_in(folder_.path()), std::vector<std::string>{"link.json"});
}

TEST_F(Robustness, AKilledWriterLeavesTheOldFileOrTheNew) {
  const std::string path = folder_ / "result.json";
  const auto start = std::chrono::steady_clock::now();
  ASSERT_LE(run_process({"solve", kLink, "--quiet", "--json", path}).code, 1);
  const std::chrono::duration<double> whole_run = std::chrono::steady_clock::now() - start;
  const std::string whole = contents(path);
  std::mt19937_64 random(1);
  int num_killed = 0;
  for (int i = 0; i < 20; ++i) {
    write_file(path, "old");
    Conditions conditions;
    conditions.signal = SIGKILL;
    conditions.signal_after_s =
        whole_run.count() * (0.5 + 0.6 * static_cast<double>(random() % 1000) * 1e-3);
    num_killed += run_process({"solve", kLink, "--quiet", "--json", path}, conditions).signal != 0;
    const std::string now = contents(path);
    EXPECT_TRUE(now == "old" || now == whole) << now.size() << " bytes of " << whole.size();
  }
  EXPECT_GT(num_killed, 0);
}

}  // namespace
}  // namespace tapwright::test
