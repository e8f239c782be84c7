#pragma once
// Files that tests read.

#include <gtest/gtest.h>

#include <algorithm>
#include <cctype>
#include <filesystem>
#include <fstream>
#include <iterator>
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
      file_name.begin(), file_name.end(), [](unsigned char c) { return std::isalnum(c) == 0; },
      '_');
  return file_name;
}

}  // namespace tapwright::test
