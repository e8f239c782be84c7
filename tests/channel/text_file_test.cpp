#include "tapwright/channel/text_file.hpp"

#include <gtest/gtest.h>
#include <sys/stat.h>
#include <unistd.h>

#include <filesystem>
#include <fstream>
#include <thread>

namespace tapwright {
namespace {

class ReadTextFile : public testing::Test {
 protected:
  void SetUp() override {
    folder_ = std::filesystem::temp_directory_path() /
              ("tapwright_text_file_" + std::to_string(::getpid()));
    std::filesystem::create_directories(folder_);
  }
  void TearDown() override { std::filesystem::remove_all(folder_); }

  [[nodiscard]] std::string path(const std::string& name) const {
    return (folder_ / name).string();
  }
  void write(const std::string& name, const std::string& text) const {
    std::ofstream(path(name), std::ios::binary) << text;
  }
  static std::string complaint(const std::string& path, std::size_t max_bytes = 1000) {
    const auto result = read_text_file(path, max_bytes);
    EXPECT_FALSE(result);
    return result.notes.size() == 1 ? result.notes[0].message : "?";
  }

  std::filesystem::path folder_;
};

TEST_F(ReadTextFile, GivesTheBytesAndTheirDigest) {
  write("abc", "abc");
  const auto result = read_text_file(path("abc"));
  ASSERT_TRUE(result);
  EXPECT_EQ(result.value->text, "abc");
  // FIPS 180-2, appendix B.1.
  EXPECT_EQ(result.value->sha256,
            "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad");
  write("empty", "");
  ASSERT_TRUE(read_text_file(path("empty")));
  EXPECT_EQ(read_text_file(path("empty")).value->text, "");
}

TEST_F(ReadTextFile, ReadsAPipeToItsEnd) {
  ASSERT_EQ(::mkfifo(path("pipe").c_str(), 0600), 0);
  std::string text(300000, 'x');
  text += "end";
  std::thread writer([&] { write("pipe", text); });
  const auto result = read_text_file(path("pipe"));
  writer.join();
  ASSERT_TRUE(result);
  EXPECT_EQ(result.value->text, text);
}

TEST_F(ReadTextFile, TakesExactlyTheLargestSizeAndRefusesMore) {
  write("full", std::string(1000, 'x'));
  EXPECT_TRUE(read_text_file(path("full"), 1000));
  write("over", std::string(1001, 'x'));
  EXPECT_EQ(complaint(path("over")), "found a file of 1001 bytes; at most 1000 bytes are read");
  ASSERT_EQ(::mkfifo(path("pipe").c_str(), 0600), 0);
  std::thread writer([&] { write("pipe", std::string(1001, 'x')); });
  EXPECT_EQ(complaint(path("pipe")), "found more than 1000 bytes; at most 1000 bytes are read");
  writer.join();
}

TEST_F(ReadTextFile, SaysWhyAFileCanNotBeRead) {
  EXPECT_EQ(complaint(path("absent")), "no such file");
  EXPECT_EQ(complaint(folder_.string()), "found a directory; wanted a file");
  EXPECT_EQ(complaint(""), "found an empty path; wanted a file");
  EXPECT_EQ(complaint(std::string("a\0b", 3)), "found a zero byte in the path");
  write("file", "x");
  EXPECT_EQ(complaint(path("file/below")), "can't be opened: Not a directory");
  if (::geteuid() == 0) GTEST_SKIP() << "root may read everything";
  ::chmod(path("file").c_str(), 0);
  EXPECT_EQ(complaint(path("file")), "can't be opened: Permission denied");
}

}  // namespace
}  // namespace tapwright
