// Any bytes at all give either a study whose points can be told apart, or an error.
#include <cstddef>
#include <cstdint>
#include <cstdlib>
#include <filesystem>
#include <fstream>
#include <string>
#include <string_view>

#include "tapwright/study/study_file.hpp"

namespace {

/// A folder with the one link that the seeds name.
std::string folder_with_link() {
  const auto folder = std::filesystem::temp_directory_path() / "tapwright_study_fuzz";
  std::filesystem::create_directories(folder);
  std::ofstream(folder / "base.json") << R"({"format": "tapwright.link/1",
    "signal": {"symbol_rate_gbd": 1}, "receiver": {"noise": {"rms_mv": 2}},
    "channel": {"pulse": {"samples_v": [0.1, 0.8, 0.2], "samples_per_ui": 1}}})";
  return folder.string();
}

}  // namespace

extern "C" int LLVMFuzzerTestOneInput(const std::uint8_t* data, std::size_t size) {
  const std::string_view text(reinterpret_cast<const char*>(data), size);
  static const std::string kFolder = folder_with_link();
  const auto result = tapwright::parse_study(text, "study.json", kFolder);
  if (result.value.has_value() == tapwright::has_error(result.notes)) std::abort();
  if (!result) return 0;
  const tapwright::Study& study = *result.value;
  const std::int64_t last = study.num_points() - 1;
  if (last < 0 || study.point_at(study.places(last)) != last) std::abort();
  return 0;
}
