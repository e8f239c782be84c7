#pragma once
// Runs one of our reference scripts with the interpreter that has numpy and scipy.

#include <cstdio>
#include <nlohmann/json.hpp>
#include <optional>
#include <string>

namespace tapwright::test {

/// True when the interpreter and scipy are there; a test skips otherwise.
inline bool has_scipy() {
  const std::string command =
      std::string(TAPWRIGHT_PYTHON) + " -c 'import numpy, scipy' > /dev/null 2>&1";
  static const bool found = std::system(command.c_str()) == 0;  // NOLINT: fixed command
  return found;
}

/// Standard output of `script` (a path below the source folder) as JSON; `arguments` go through a
/// shell. Empty when the script fails, its message goes to the test log.
inline std::optional<nlohmann::json> run_python(const std::string& script,
                                                const std::string& arguments = "") {
  const std::string command =
      std::string(TAPWRIGHT_PYTHON) + " '" TAPWRIGHT_SOURCE_DIR "/" + script + "' " + arguments;
  std::FILE* pipe = popen(command.c_str(), "r");
  if (pipe == nullptr) return std::nullopt;
  std::string text;
  char buffer[65536];
  while (const std::size_t n = std::fread(buffer, 1, sizeof buffer, pipe)) text.append(buffer, n);
  if (pclose(pipe) != 0) return std::nullopt;
  return nlohmann::json::parse(text);
}

}  // namespace tapwright::test
