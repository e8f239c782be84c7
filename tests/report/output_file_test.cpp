#include "tapwright/report/output_file.hpp"

#include <gtest/gtest.h>
#include <sys/resource.h>
#include <sys/stat.h>
#include <unistd.h>

#include <csignal>
#include <filesystem>
#include <fstream>
#include <sstream>

namespace tapwright {
namespace {

namespace fs = std::filesystem;

class OutputFile : public ::testing::Test {
 protected:
  void SetUp() override {
    folder_ = fs::path(::testing::TempDir()) / ("tapwright_output_" + std::to_string(::getpid()));
    fs::create_directories(folder_);
  }
  void TearDown() override { fs::remove_all(folder_); }
  [[nodiscard]] std::string path(const std::string& name) const { return (folder_ / name).string(); }
  static std::string content(const std::string& file) {
    std::ostringstream text;
    text << std::ifstream(file).rdbuf();
    return text.str();
  }
  [[nodiscard]] std::size_t num_files() const {
    return static_cast<std::size_t>(
        std::distance(fs::directory_iterator(folder_), fs::directory_iterator()));
  }
  fs::path folder_;
};

TEST_F(OutputFile, ReplacesAnOlderFileWholeAndKeepsItsMode) {
  std::ofstream(path("a")) << "old and longer";
  ::chmod(path("a").c_str(), 0640);
  ASSERT_FALSE(write_output(path("a"), "new"));
  EXPECT_EQ(content(path("a")), "new");
  struct stat found{};
  ASSERT_EQ(::stat(path("a").c_str(), &found), 0);
  EXPECT_EQ(found.st_mode & 0777u, 0640u);
  EXPECT_EQ(num_files(), 1u);
}

TEST_F(OutputFile, KeepsALinkALink) {
  std::ofstream(path("real")) << "old";
  fs::create_symlink("real", path("link"));
  ASSERT_FALSE(write_output(path("link"), "new"));
  EXPECT_TRUE(fs::is_symlink(path("link")));
  EXPECT_EQ(content(path("real")), "new");
}

TEST_F(OutputFile, NamesADirectoryInTheWayAndAMissingFolder) {
  fs::create_directory(path("d"));
  EXPECT_EQ(check_output(path("d"))->message, "can't be written: a directory is in the way");
  const auto missing = write_output(path("no/such"), "x");
  ASSERT_TRUE(missing);
  EXPECT_EQ(missing->message, "can't be written: there is no directory " + path("no"));
  EXPECT_FALSE(check_output("-"));
}

TEST_F(OutputFile, LeavesTheOldFileWhenTheDiskIsFull) {
  std::ofstream(path("a")) << "old";
  std::signal(SIGXFSZ, SIG_IGN);
  rlimit before{};
  ::getrlimit(RLIMIT_FSIZE, &before);
  const rlimit small{1000, before.rlim_max};
  ::setrlimit(RLIMIT_FSIZE, &small);
  const auto problem = write_output(path("a"), std::string(5000, 'x'));
  ::setrlimit(RLIMIT_FSIZE, &before);
  ASSERT_TRUE(problem);
  EXPECT_EQ(problem->message, "can't be written: File too large");
  EXPECT_EQ(content(path("a")), "old");
  EXPECT_EQ(num_files(), 1u);  // no temporary file is left
}

}  // namespace
}  // namespace tapwright
