#pragma once
// Files that tests read.

#include <gtest/gtest.h>

#include <algorithm>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <iterator>
#include <optional>
#include <string>
#include <vector>

namespace tapwright::test {

inline std::string bytes_of(const std::filesystem::path& path) {
  std::ifstream stream(path, std::ios::binary);
  EXPECT_TRUE(stream) << path;
  return {std::istreambuf_iterator<char>(stream), std::istreambuf_iterator<char>()};
}

/// Names of the files in a folder of the source tree that have a `.expect` beside them, sorted.
inline std::vector<std::string> files_with_expectation(const std::string& folder) {
  std::vector<std::string> names;
  const std::filesystem::path root = std::filesystem::path(TAPWRIGHT_SOURCE_DIR) / folder;
  for (const auto& entry : std::filesystem::directory_iterator(root)) {
    if (entry.path().extension() == ".expect") names.push_back(entry.path().stem().string());
  }
  std::sort(names.begin(), names.end());
  return names;
}

/// A file name as part of a test's name, which may hold letters, digits and underscores only.
inline std::string test_name_of(std::string file_name) {
  std::replace_if(
      file_name.begin(), file_name.end(),
      [](unsigned char c) { return std::isalnum(c) == 0; }, '_');
  return file_name;
}

/// A measured or simulated file that is not part of the project; empty when it is not there.
inline std::optional<std::string> outside_file(const std::string& name) {
  std::vector<std::filesystem::path> folders;
  for (const char* variable : {"TAPWRIGHT_DATA", "TAPWRIGHT_TEST_DATA"}) {
    if (const char* const folder = std::getenv(variable)) folders.emplace_back(folder);
  }
  folders.push_back(std::filesystem::path(TAPWRIGHT_SOURCE_DIR) / ".." / "shared" / "data");
  for (const auto& folder : folders) {
    if (std::filesystem::exists(folder / name)) return (folder / name).string();
  }
  return std::nullopt;
}

}  // namespace tapwright::test
