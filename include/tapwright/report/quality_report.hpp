#pragma once
// How far the files of a link can be trusted, for people and for programs.

#include <string>
#include <vector>

#include "tapwright/link/file_quality.hpp"

namespace tapwright {

/// One table a file; millivolts at `launch_v`. Empty when there are no files.
[[nodiscard]] std::string text_of(const std::vector<FileQuality>& files, double launch_v);
/// A JSON array; numbers at full precision, `eye_cost_mv` at `launch_v`.
[[nodiscard]] std::string json_of(const std::vector<FileQuality>& files, double launch_v);

}  // namespace tapwright
