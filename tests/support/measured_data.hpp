#pragma once
// The channel files that are too large for the project: a folder beside it, or one that the
// environment names.

#include <cstdlib>
#include <filesystem>
#include <optional>
#include <string>

namespace tapwright::test {

constexpr const char* kNoMeasuredFiles =
    "the measured channel files are not here (TAPWRIGHT_TEST_DATA names their folder)";

/// Path of one of them; empty when it is not there: GTEST_SKIP() << kNoMeasuredFiles.
inline std::optional<std::string> measured_file(const std::string& name) {
  const char* named = std::getenv("TAPWRIGHT_TEST_DATA");
  const std::filesystem::path folder =
      named != nullptr ? named : TAPWRIGHT_SOURCE_DIR "/../shared/data";
  const std::filesystem::path path = folder / name;
  if (!std::filesystem::exists(path)) return std::nullopt;
  return std::filesystem::canonical(path).string();
}

}  // namespace tapwright::test
